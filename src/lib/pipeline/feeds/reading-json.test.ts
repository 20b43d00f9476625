import fc from 'fast-check';
import { describe, expect, it } from 'vitest';
import { createFeedLines, toFeedItem, type FeedEntryLike } from './reading-json.ts';

const facts = new Map([
	[1, { name: 'PMP-1.DE.V', unit: 'mm/s' }],
	[2, { name: 'a"b\\c', unit: 'Cel' }],
]);

const entry = fc.record({
	tagId: fc.constantFrom(1, 2, 3),
	at: fc.integer({ min: Date.UTC(1999, 11, 31), max: Date.UTC(2101, 0, 1) }),
	value: fc.option(fc.double({ noNaN: true, noDefaultInfinity: true })),
	quality: fc.constantFrom(0, 0x80000000, 0x408f0000, 0x80ab0000, 0xffffffff),
	isHubTime: fc.boolean(),
	isTest: fc.boolean(),
});

describe('NDJSON lines', () => {
	it('are those of the JSON answer, whatever came before on the same tag', () => {
		fc.assert(
			fc.property(fc.array(entry, { maxLength: 40 }), (entries) => {
				const lines = createFeedLines(facts);
				for (const one of entries) {
					const line = lines.reading(one.tagId, one.at, one.value, one.quality, one);
					const item = toFeedItem({ kind: 'reading', ...one }, facts);
					// JSON.stringify writes -0 as 0 [ECMA-262 §25.5.2.4], and so must the line.
					expect(line).toBe(`${JSON.stringify(item)}\n`);
				}
			}),
		);
	});

	it('keep the milliseconds at both edges of a minute', () => {
		const lines = createFeedLines(facts);
		const at = (time: number) =>
			(JSON.parse(lines.reading(1, time, 1, 0, { isHubTime: false, isTest: false })) as { at: string }).at;
		expect(at(Date.UTC(2026, 1, 28, 23, 59, 59, 999))).toBe('2026-02-28T23:59:59.999Z');
		expect(at(Date.UTC(2026, 2, 1))).toBe('2026-03-01T00:00:00.000Z');
	});

	it('of events carry what the event says', () => {
		const event: Extract<FeedEntryLike, { kind: 'event' }>['event'] = { event: 'source-lost', at: 0, source: 'GW' };
		expect(JSON.parse(createFeedLines(facts).event(event))).toEqual({
			kind: 'event',
			event: 'source-lost',
			at: '1970-01-01T00:00:00.000Z',
			source: 'GW',
		});
	});
});
