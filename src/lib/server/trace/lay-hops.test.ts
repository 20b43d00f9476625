import { expect, it } from 'vitest';
import { layHops, type KnownWay } from './lay-hops.ts';

const way: KnownWay = {
	tagId: 1,
	tag: 'PUMP1.DE.V',
	unit: 'mm/s',
	detector: 'rms',
	row: {
		tag: 'PUMP1.DE.V',
		unit_id: 4,
		table: 'holding-register',
		register: 100,
		data_type: 'int32',
		scale: 0.01,
		unit: 'mm/s',
		raw_unit: '[in_i]/s',
		detector: 'rms',
		high_range: 50,
	},
	revision: 3,
	at: 1_000,
	receivedAt: 1_011,
	storedAt: 1_050,
	sourceAt: null,
	isHubTime: true,
	value: 6.35,
	quality: 0,
	reason: null,
	raw: null,
	wire: null,
	verdict: 'alert',
	source: { id: 's', name: 'gateway', kind: 'modbus' },
	readers: [{ name: 'historian', position: 12, readAt: 2_000 }],
};
const hop = (of: KnownWay, name: string) => layHops(of).hops.find((one) => one.hop === name);

it('rebuilds what was not kept, by the row of the revision, and says so', () => {
	// One inch is 25.4 mm exactly: 6.35 mm/s = 0.25 in/s = 25 counts of 0.01.
	expect(hop(way, 'decode')).toMatchObject({ after: 25, captured: false, label: 'int32', detail: 'high word first' });
	expect(hop(way, 'scale')).toMatchObject({ before: 25, after: 0.25, formula: '25 × 0.01 + 0', mark: 'changed' });
	expect(hop(way, 'convert')).toMatchObject({ before: 0.25, after: 6.35, formula: '0.25 × 25.4', unit: 'mm/s rms' });
});

it('shows what was captured as captured', () => {
	const latest = { ...way, raw: '25', wire: '00 00 00 19' };
	expect(hop(latest, 'wire')).toMatchObject({
		label: 'registers 100–101',
		after: '00 00 00 19',
		captured: true,
		detail: 'gateway, unit 4, holding-register',
	});
	expect(hop(latest, 'decode')).toMatchObject({ before: '00 00 00 19', after: 25, captured: true });
});

it('keeps an integer beyond 2^53 exact', () => {
	expect(hop({ ...way, raw: '9007199254740993' }, 'decode')?.after).toBe('9007199254740993');
});

it('marks where a value was spoiled, where a limit was crossed, and who has read it', () => {
	expect(hop({ ...way, value: null, quality: 0x808c0000, reason: 'sentinel' }, 'quality')).toMatchObject({
		after: 'BadSensorFailure',
		detail: 'sentinel',
		mark: 'spoiled',
	});
	expect(hop(way, 'verdict')?.mark).toBe('alert');
	expect(hop(way, 'feed')).toMatchObject({ label: 'historian', after: 6.35 });
});
