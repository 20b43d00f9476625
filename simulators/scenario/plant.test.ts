// Pure.
import { describe, expect, it } from 'vitest';
import { createPlant } from './plant.ts';

const NOON = Date.UTC(2026, 10, 30, 12, 0, 0);
const MINUTE = 60_000;

describe('the demo plant', () => {
	it('gives the same numbers for the same seed and others for another', () => {
		const [one, same, other] = [createPlant(7), createPlant(7), createPlant(8)];
		const all = (plant: typeof one) => plant.signals.map((signal) => plant.read(signal.path, NOON).value);
		expect(all(one)).toEqual(all(same));
		expect(all(one)).not.toEqual(all(other));
	});

	it('has the gateways, machines and unique paths that the two sites are described with', () => {
		const plant = createPlant(1);
		expect(new Set(plant.signals.map((signal) => signal.path)).size).toBe(plant.signals.length);
		expect(plant.sensors.filter((sensor) => sensor.gateway === 'a')).toHaveLength(21);
		expect(plant.signals.filter((signal) => signal.gateway === 'a')).toHaveLength(210);
		expect(plant.machines.filter((machine) => machine.site === 'saltmere')).toHaveLength(12);
		expect(plant.machines.filter((machine) => machine.kind === 'steam-trap')).toHaveLength(8);
	});

	it('keeps a plant without events inside its ranges, and its vibration below 4.5 mm/s', () => {
		const plant = createPlant(1, { scheduled: false });
		for (const signal of plant.signals) {
			for (let hour = 0; hour < 24; hour++) {
				const { value } = plant.read(signal.path, NOON + hour * 60 * MINUTE);
				expect(value, signal.path).toBeGreaterThanOrEqual(signal.low);
				expect(value, signal.path).toBeLessThanOrEqual(signal.high);
				if (signal.unit === 'mm/s') expect(value, signal.path).toBeLessThan(4.5);
			}
		}
	});

	it('lets the unbalance of HL-3 cross 5.0 and then 7.6 mm/s at the pump', () => {
		const plant = createPlant(1, { scheduled: false });
		plant.provoke('hl3-unbalance', { at: NOON, lastsMs: 8 * 3_600_000, growsMs: 6 * 3_600_000 });
		const mm = (at: number) => ((plant.read('HL-3.PDE.H.VEL', at).value ?? 0) * 25.4) / Math.SQRT2;
		expect(mm(NOON)).toBeLessThan(4);
		expect(mm(NOON + 4.5 * 3_600_000)).toBeGreaterThan(5);
		expect(mm(NOON + 7 * 3_600_000)).toBeGreaterThan(7.6);
	});

	it('shows what is provoked at once, though the sensor would measure only every ten minutes', () => {
		const plant = createPlant(1, { scheduled: false });
		plant.provoke('hl3-unbalance', { at: NOON });
		expect(plant.read('HL-3.PDE.H.VEL', NOON).measuredAt).toBe(NOON);
	});

	it('sends buffered measurements late and in order once the radio is back', () => {
		const plant = createPlant(1, { scheduled: false });
		plant.provoke('radio-fade', { at: NOON, lastsMs: 5 * MINUTE });
		const path = 'HL-1.PDE.TEMP';
		expect(plant.read(path, NOON + 4 * MINUTE).measuredAt).toBeLessThan(NOON);
		expect(plant.arrivals(path, NOON, NOON + 5 * MINUTE - 1)).toEqual([]);
		const late = plant.arrivals(path, NOON + 5 * MINUTE - 1, NOON + 5 * MINUTE + 1);
		expect(late.length).toBeGreaterThanOrEqual(5);
		const times = late.map((reading) => reading.measuredAt);
		expect(times).toEqual([...times].sort((left, right) => left - right));
		expect(new Set(late.map((reading) => reading.arrivedAt))).toEqual(new Set([NOON + 5 * MINUTE]));
	});

	it('lets a dead sensor stand, a frozen value repeat, one value go NaN and one sample spike', () => {
		const plant = createPlant(1, { scheduled: false });
		for (const name of ['dead-sensor', 'freeze', 'not-a-number'] as const) plant.provoke(name, { at: NOON });
		plant.provoke('spike', { at: NOON + 1 });
		const later = NOON + 8 * MINUTE;
		expect(plant.read('HL-5.PNDE.TEMP', later)).toMatchObject({ status: 'dead' });
		expect(plant.read('HL-5.PNDE.TEMP', later).measuredAt).toBeLessThan(NOON);
		expect(plant.read('B-2.BDE.TEMP', later).value).toBe(plant.read('B-2.BDE.TEMP', later + 5 * MINUTE).value);
		expect(plant.read('HL-1.PNDE.HFP', later).value).toBeNaN();
		expect(plant.read('B-1.MDE.H.VEL', NOON + 1).value).toBeGreaterThan(50);
		expect(plant.read('B-1.MDE.H.VEL', NOON + 3 * MINUTE).value).toBeLessThan(4.5);
	});

	it('raises the vane-pass part of LL-2 while its flow is under 60 %', () => {
		const plant = createPlant(1, { scheduled: false });
		const flow = plant.read('LL-2.FLOW', NOON).value ?? 0;
		const vane = plant.read('LL-2.PDE.VPF', NOON).value ?? 0;
		plant.provoke('ll2-vane-pass', { at: NOON + MINUTE });
		expect(plant.read('LL-2.FLOW', NOON + 2 * MINUTE).value ?? 0).toBeLessThan(flow * 0.6);
		expect(plant.read('LL-2.PDE.VPF', NOON + 2 * MINUTE).value ?? 0).toBeGreaterThan(vane * 3);
	});
});
