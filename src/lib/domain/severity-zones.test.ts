import { describe, expect, it } from 'vitest';
import { zoneBandHz, zoneLimits, zonesOf, type ZoneMachine } from './severity-zones.ts';

const machine = (extra: Partial<ZoneMachine> = {}): ZoneMachine => ({
	kind: 'fan',
	powerKw: 315,
	speedRpm: 1_485,
	isoGroup: null,
	foundation: 'rigid',
	pumpCategory: null,
	...extra,
});

describe('zones of rotating machines (ISO 20816-3, from memory)', () => {
	// The standard gives each boundary twice, as velocity and as displacement in um rms; both meet at one corner,
	// 12.5 Hz for group 1 and 10 Hz for group 2: s = v / (2 pi f). A mistyped cell fails.
	it.each([
		[1, 'rigid', [29, 57, 90], 12.5],
		[1, 'flexible', [45, 90, 140], 12.5],
		[2, 'rigid', [22, 45, 71], 10],
		[2, 'flexible', [37, 71, 113], 10],
	] as const)(
		'group %i on a %s foundation agree with the displacement boundaries at the corner',
		(isoGroup, foundation, um, corner) => {
			const zones = zonesOf(machine({ isoGroup, foundation }), 'motor');
			if (!zones.ok) throw new Error(zones.reason);
			const velocities = [zones.value.ab, zones.value.bc, zones.value.cd];
			velocities.forEach((velocity, index) => {
				expect(Math.abs((velocity * 1_000) / (2 * Math.PI * corner) - (um[index] ?? 0))).toBeLessThan(1);
			});
		},
	);

	it('take the group from the power where none is given: above 300 kW is group 1', () => {
		expect(zonesOf(machine({ powerKw: 301 }), 'motor')).toMatchObject({
			value: { bc: 4.5, table: 'ISO 20816-3 group 1, rigid' },
		});
		expect(zonesOf(machine({ powerKw: 300 }), 'motor')).toMatchObject({
			value: { bc: 2.8, table: 'ISO 20816-3 group 2, rigid' },
		});
	});

	it('are refused where the machine does not say enough or the table does not reach', () => {
		expect(zonesOf(machine({ powerKw: null }), 'motor')).toMatchObject({ reason: 'no-power' });
		expect(zonesOf(machine({ foundation: null }), 'motor')).toMatchObject({ reason: 'no-foundation' });
		expect(zonesOf(machine({ speedRpm: null }), 'motor')).toMatchObject({ reason: 'no-speed' });
		expect(zonesOf(machine({ speedRpm: 85 }), 'motor')).toMatchObject({ reason: 'too-slow' });
		expect(zonesOf(machine({ powerKw: 5 }), 'motor')).toMatchObject({ reason: 'too-small' });
	});

	it('ask for the band from 2 Hz for a machine below 600 r/min', () => {
		expect(zoneBandHz(599)).toEqual([2, 1_000]);
		expect(zoneBandHz(600)).toEqual([10, 1_000]);
	});
});

describe('zones of pumps (ISO 10816-7, from memory)', () => {
	it.each([
		['I', 200, [2.5, 4, 6.6]],
		['I', 201, [3.5, 5, 7.6]],
		['II', 90, [3.2, 5.1, 8.5]],
		['II', 315, [4.2, 6.1, 9.5]],
	] as const)('category %s at %i kW', (pumpCategory, powerKw, [ab, bc, cd]) => {
		expect(zonesOf(machine({ pumpCategory, powerKw }), 'driven')).toMatchObject({ value: { ab, bc, cd } });
	});

	it('are for the driven end only: the motor of a pump set goes by the table of rotating machines', () => {
		expect(zonesOf(machine({ pumpCategory: 'I' }), 'motor')).toMatchObject({ value: { table: 'ISO 20816-3 group 1, rigid' } });
	});
});

describe('limits from zones and a baseline (ISO 20816-1, from memory)', () => {
	const zones = (bc: number, cd: number) => ({ ab: 0, bc, cd, table: '' });
	// Worked by hand: 2.0 + 4.5 / 4 = 3.125; 1.0 + 2.8 / 4 = 1.7; not above 1.25 x 4.5 = 5.625.
	it.each([
		['baseline 2.0 under B/C 4.5', 2, 4.5, 3.125, false],
		['baseline 1.0 under B/C 2.8', 1, 2.8, 1.7, false],
		['baseline 5.0 under B/C 4.5, capped', 5, 4.5, 5.625, true],
	] as const)('%s', (_, baseline, bc, alert, isCapped) => {
		expect(zoneLimits(zones(bc, 7.1), baseline)).toEqual({ alert, danger: 7.1, isCapped });
	});

	it('stand at the boundaries without a baseline', () => {
		expect(zoneLimits(zones(4.5, 7.1), null)).toEqual({ alert: 4.5, danger: 7.1, isCapped: false });
	});
});
