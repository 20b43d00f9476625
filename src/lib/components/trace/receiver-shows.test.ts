import { expect, test } from 'vitest';
import type { Trace, TraceHop } from '#lib/domain/trace.ts';
import { explainReceiver, readShown, type ShownNumber } from './receiver-shows.ts';

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
	// Bytes 41 C9 00 00 with the low word first are 00 00 41 C9: 16,841 as an integer, by hand; as uint16 the first register is 0x41C9 = 16,841.
	decodings: [
		{ words: 'uint32, low word first', raw: 16_841, scaled: 168.41, value: 3_024.77 },
		{ words: 'uint16, first register only', raw: 16_841, scaled: 168.41, value: 3_024.77 },
	],
};
const shown = (text: string): ShownNumber => {
	const number = readShown(text);
	if (!number) throw new Error(`no number: ${text}`);
	return number;
};

test('a receiver that shows the delivered value is right', () => {
	expect(explainReceiver(trace, shown('4.51')).words).toContain('what the hub delivers');
});

test('a receiver that shows the value before a station has left that station out', () => {
	const verdict = explainReceiver(trace, shown('0.25125'));
	expect(verdict.hop).toBe(3);
	expect(verdict.words).toContain('convert left out');
});

test('6.38 is 4.512579 times the square root of two: peak instead of rms', () => {
	const verdict = explainReceiver(trace, shown('6.38'));
	expect(verdict.hop).toBe(3);
	expect(verdict.words).toContain('peak instead of rms');
});

test('a number that no station and no usual slip gives is said to be none', () => {
	expect(explainReceiver(trace, shown('91.7')).hop).toBeNull();
});

test('a number is read with its last digit, whatever the sign for decimals and minus', () => {
	expect(readShown(' 6,38 ')).toEqual({ value: 6.38, half: 0.005, digits: 3 });
	expect(readShown('−12')).toEqual({ value: -12, half: 0.5, digits: 2 });
	expect(readShown('4.5e-3')).toMatchObject({ value: 0.0045, digits: 2 });
	expect(readShown('4.5e-3')?.half).toBeCloseTo(0.00005, 12);
	expect(readShown('five')).toBeNull();
	expect(readShown('.')).toBeNull();
});

test('a rounded number is the delivered one where half its last digit covers the difference', () => {
	expect(explainReceiver(trace, shown('5')).words).toContain('what the hub delivers');
	expect(explainReceiver(trace, shown('4.9')).words).not.toContain('what the hub delivers');
});

test('another word order, type or sign of the same bytes is named at the decode station, with how far it was carried', () => {
	const verdict = explainReceiver(trace, shown('16841'));
	expect(verdict.hop).toBe(1);
	expect(verdict.words).toContain('uint32, low word first, neither scaled nor converted');
	expect(verdict.others).toHaveLength(1);
	expect(explainReceiver(trace, shown('168.41')).words).toContain('scaled as here, not converted');
});

test('a station is named before a slip, and a slip before other readings of the bytes', () => {
	// 25.125 is the raw number; 0.25125 × 100 as well.
	expect(explainReceiver(trace, shown('25.125'))).toMatchObject({ hop: 2 });
});
