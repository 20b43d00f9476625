import { expect, test } from 'vitest';
import type { Trace, TraceHop } from '#lib/domain/trace.ts';
import { explainReceiver } from './receiver-shows.ts';

const hop = (name: TraceHop['hop'], after: TraceHop['after'], unit: string | null = null): TraceHop => ({
	hop: name,
	label: '',
	before: null,
	after,
	unit,
	detail: '',
	formula: null,
	at: null,
	captured: true,
	mark: null,
});

// 41 C9 00 00 is 25.125 (IEEE 754); × 0.01 is 0.25125 in/s; × 25.4 ÷ √2 is 4.512579 mm/s rms: worked by hand.
const trace: Trace = {
	tag: 'HL-3.MDE.H.VEL',
	at: '2026-12-01T14:22:05.082Z',
	time_from: 'source',
	revision: 17,
	value: 4.512579,
	unit: 'mm/s',
	hops: [
		hop('wire', '41C90000'),
		hop('decode', 25.125),
		hop('scale', 0.25125, 'in/s derived peak'),
		hop('convert', 4.512579, 'mm/s rms'),
	],
};

test('a receiver that shows the delivered value is right', () => {
	expect(explainReceiver(trace, 4.51).words).toContain('what the hub delivers');
});

test('a receiver that shows the value before a station has left that station out', () => {
	const verdict = explainReceiver(trace, 0.25125);
	expect(verdict.hop).toBe(3);
	expect(verdict.words).toContain('convert left out');
});

test('6.38 is 4.512579 times the square root of two: peak instead of rms', () => {
	const verdict = explainReceiver(trace, 6.38);
	expect(verdict.hop).toBe(3);
	expect(verdict.words).toContain('peak instead of rms');
});

test('a number that no station and no usual slip gives is said to be none', () => {
	expect(explainReceiver(trace, 91.7).hop).toBeNull();
});
