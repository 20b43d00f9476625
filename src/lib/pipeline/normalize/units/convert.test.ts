import fc from 'fast-check';
import { describe, expect, it } from 'vitest';
import { statusToClassic, classicToStatus } from '#lib/domain/quality-classic.ts';
import { STATUS_CODES, isGood, qualityJson, severityOf, toStored, toUnsigned } from '#lib/domain/quality.ts';
import { DETECTORS, type Detector } from '#lib/domain/tag-map/row.ts';
import { compileConversion, convertDifference } from './convert.ts';
import { CEFACT_OF_UCUM, ucumOfUnitId, unitIdOf } from './eu-information.ts';
import { fitsQuantity, unitLabel } from './quantity.ts';
import { isUnit } from './ucum.ts';

const convert = (
	value: number,
	rawUnit: string,
	unit: string,
	rawDetector: Detector = 'none',
	detector: Detector = 'none',
	frequencyHz: number | null = null,
) => {
	const line = compileConversion({ rawUnit, rawDetector, unit, detector, frequencyHz });
	return line.ok ? value * line.value.factor + line.value.offset : line.reason;
};
const close = (found: number | string, expected: number, relative = 1e-9) => {
	expect(typeof found).toBe('number');
	expect(Math.abs(Number(found) - expected)).toBeLessThanOrEqual(relative * Math.max(1e-12, Math.abs(expected)));
};

describe('units', () => {
	// Source: exact definitions (inch 1959, standard gravity 3rd CGPM 1901, Celsius and Fahrenheit scales); psi from the pound and the inch.
	it.each<[number, string, string, number]>([
		[1, '[in_i]', 'mm', 25.4],
		[1, '[mil_i]', 'um', 25.4],
		[1, '[in_i]/s', 'mm/s', 25.4],
		[1, '[g]', 'm/s2', 9.80665],
		[212, '[degF]', 'Cel', 100],
		[185, '[degF]', 'Cel', 85],
		[-40, '[degF]', 'Cel', -40],
		[25, 'Cel', 'K', 298.15],
		[3000, '/min', 'Hz', 50],
		[1797, '/min', 'Hz', 29.95],
		[1, '[psi]', 'kPa', 6.894757293168],
	])('%d %s is %s: %d', (value, from, to, expected) => {
		close(convert(value, from, to), expected);
	});

	it('an annotation is inert, so {rpm} is no frequency [UCUM §6]', () => {
		expect(isUnit('{rpm}')).toBe(true);
		expect(convert(1, '{rpm}', 'Hz')).toBe('no-conversion');
		close(convert(1, 'mm/s{rms}', 'mm/s'), 1);
	});

	it.each([
		'mm/s',
		'[in_i]/s',
		'm/s2',
		'[g]',
		'Cel',
		'[degF]',
		'K',
		'um',
		'[mil_i]',
		'Hz',
		'/min',
		'V',
		'mA',
		'%',
		'dB',
		'bar',
		'[psi]',
		'kW',
		'h',
		'1',
	])('%s is a unit', (code) => {
		expect(isUnit(code)).toBe(true);
	});

	it.each(['dB[mW]', 'm/', '10+3/ul', 'molv', 'mm/sec', ''])(
		'%s is none [UCUM functional tests 1-102, 1-108, 1-210 among them]',
		(code) => {
			expect(isUnit(code)).toBe(false);
		},
	);

	it('refuses a conversion without meaning', () => {
		expect(convert(1, 'mm/s', 'Cel')).toBe('no-conversion');
		expect(convert(1, 'mm/sec', 'mm/s')).toBe('unknown-unit');
	});

	it('a difference of temperature converts without the offset: 18 degF are 10 Cel', () => {
		const line = compileConversion({ rawUnit: '[degF]', rawDetector: 'none', unit: 'Cel', detector: 'none', frequencyHz: null });
		close(line.ok ? convertDifference(18, line.value) : 'refused', 10);
	});

	it('a unit and back is the same value', () => {
		fc.assert(
			fc.property(
				fc.double({ min: -1e6, max: 1e6, noNaN: true }),
				fc.constantFrom(['[in_i]/s', 'mm/s'], ['[degF]', 'Cel'], ['[psi]', 'bar'], ['/min', 'Hz']),
				(value, [from, to]) => {
					const there = convert(value, from ?? '', to ?? '');
					const back = convert(Number(there), to ?? '', from ?? '');
					return Math.abs(Number(back) - value) <= 1e-9 * Math.max(1, Math.abs(value));
				},
			),
		);
	});
});

describe('detectors', () => {
	// Source: for a sine, peak = √2 × rms, peak-to-peak = 2 × peak; derived values are defined so.
	it.each<[Detector, Detector, number]>([
		['rms', 'derived-peak', Math.SQRT2],
		['derived-peak', 'rms', Math.SQRT1_2],
		['rms', 'derived-peak-to-peak', 2 * Math.SQRT2],
		['derived-peak', 'derived-peak-to-peak', 2],
	])('%s to %s is exact', (from, to, factor) => {
		close(convert(1, 'mm/s', 'mm/s', from, to), factor);
	});

	it('a true peak is refused another detector unless one frequency is declared', () => {
		expect(convert(1, 'mm/s', 'mm/s', 'peak', 'rms')).toBe('true-peak-without-frequency');
		expect(convert(1, 'mm/s', 'mm/s', 'rms', 'peak')).toBe('true-peak-without-frequency');
		close(convert(1, 'mm/s', 'mm/s', 'peak', 'rms', 50), Math.SQRT1_2);
		close(convert(1, 'mm/s', 'mm/s', 'peak', 'peak'), 1);
	});

	it('the worked value of a trace: 0.25125 in/s derived peak is 4.512579 mm/s rms', () => {
		close(convert(0.25125, '[in_i]/s', 'mm/s', 'derived-peak', 'rms'), 4.512579, 1e-7);
	});

	// Worked by hand: x in/s peak of a sine × 25.4 ÷ √2.
	it.each([
		[0.1, 1.796051],
		[0.2, 3.592102],
		[0.3, 5.388154],
		[0.314, 5.639601],
	])('%d in/s derived peak is %d mm/s rms', (value, expected) => {
		close(convert(value, '[in_i]/s', 'mm/s', 'derived-peak', 'rms'), expected, 1e-6);
	});

	it('there and back is the same for every pair', () => {
		for (const from of DETECTORS) {
			for (const to of DETECTORS) {
				if (from === 'none' || to === 'none') continue;
				close(convert(Number(convert(3, 'mm/s', 'mm/s', from, to, 50)), 'mm/s', 'mm/s', to, from, 50), 3);
			}
		}
	});
});

describe('one sine: displacement, velocity, acceleration', () => {
	// Source: v = 2πf d, a = 2πf v, worked by hand to the digits printed.
	const cases: [number, number, number, number, number, number, number][] = [
		// g pk, Hz, m/s² rms, mm/s pk, mm/s rms, um pk, um p-p
		[1, 100, 6.934349, 15.607768, 11.036359, 24.840535, 49.681069],
		[1, 60, 6.934349, 26.012947, 18.393931, 69.001485, 138.00297],
		[0.5, 25, 3.467174, 31.215536, 22.072718, 198.724277, 397.448554],
		[1, 159.1549431, 6.934349, 9.80665, 6.934349, 9.80665, 19.6133],
	];
	it.each(cases)('%d g peak at %d Hz', (g, f, ms2, mmsPk, mmsRms, umPk, umPp) => {
		close(convert(g, '[g]', 'm/s2', 'derived-peak', 'rms', f), ms2, 1e-6);
		close(convert(g, '[g]', 'mm/s', 'derived-peak', 'derived-peak', f), mmsPk, 1e-6);
		close(convert(g, '[g]', 'mm/s', 'derived-peak', 'rms', f), mmsRms, 1e-6);
		close(convert(g, '[g]', 'um', 'derived-peak', 'derived-peak', f), umPk, 1e-6);
		close(convert(g, '[g]', 'um', 'peak', 'peak-to-peak', f), umPp, 1e-6);
	});

	it('1 g peak at 100 Hz is 11.036359 mm/s rms only when the frequency is known', () => {
		expect(convert(1, '[g]', 'mm/s', 'derived-peak', 'rms')).toBe('no-frequency');
		expect(convert(1, '[g]', 'mm/s', 'derived-peak', 'rms', 0)).toBe('no-frequency');
	});

	it('4.5 mm/s rms at 25 Hz is 28.6479 um rms and 0.101936 g peak', () => {
		close(convert(4.5, 'mm/s', 'um', 'rms', 'rms', 25), 28.6479, 1e-5);
		close(convert(4.5, 'mm/s', '[g]', 'rms', 'derived-peak', 25), 0.101936, 1e-5);
	});
});

describe('quantities and labels', () => {
	it.each<[string, string, boolean]>([
		['mm/s', 'velocity', true],
		['[g]', 'velocity', false],
		['[g]', 'acceleration', true],
		['um', 'displacement', true],
		['[g]', 'impact', true],
		['dB', 'impact', true],
		['Cel', 'temperature', true],
		['mm/s', 'temperature', false],
		['%', 'battery', true],
		['V', 'battery', true],
		['dB{mW}', 'signal', true],
		['/min', 'speed', true],
		['m3/h', 'flow', true],
		['kW', 'power', true],
	])('%s measures %s: %s', (unit, quantity, fits) => {
		expect(fitsQuantity(unit, quantity)).toBe(fits);
	});

	it('one spelling a unit', () => {
		expect(unitLabel('mm/s', 'rms')).toBe('mm/s rms');
		expect(unitLabel('[in_i]/s', 'derived-peak')).toBe('in/s derived peak');
		expect(unitLabel('Cel', 'none')).toBe('°C');
		expect(unitLabel('1', 'none')).toBe('');
	});
});

describe('engineering units of OPC UA', () => {
	// Source: OPC 10000-8 §5.6.3.3 and its published list of common codes.
	it.each<[string, number]>([
		['C16', 4403510],
		['IU', 18773],
		['MSK', 5067595],
		['K40', 4928560],
		['CEL', 4408652],
		['FAH', 4604232],
		['KEL', 4932940],
		['4H', 13384],
		['77', 14135],
		['INH', 4804168],
		['MMT', 5066068],
		['HTZ', 4740186],
		['RPM', 5394509],
		['VLT', 5655636],
		['2Z', 12890],
		['P1', 20529],
		['2N', 12878],
		['DBM', 4473421],
		['AMP', 4279632],
		['4K', 13387],
		['M41', 5059633],
		['MTS', 5067859],
		['HUR', 4740434],
		['DAY', 4473177],
		['KWT', 4937556],
		['BAR', 4342098],
	])('%s is unitId %d', (code, id) => {
		expect(unitIdOf(code)).toBe(id);
	});

	it('bare g is neither: gravity is K40, and an unknown code has no id', () => {
		expect(CEFACT_OF_UCUM['[g]']).toBe('K40');
		expect(ucumOfUnitId(4928560)).toBe('[g]');
		expect(unitIdOf('')).toBe(-1);
	});
});

describe('quality', () => {
	it('severity is bits 31:30, so calculated and overridden values are good [OPC 10000-4 §7.39]', () => {
		expect(isGood(0x00000401)).toBe(true);
		expect(isGood(STATUS_CODES.GoodLocalOverride)).toBe(true);
		expect(severityOf(0x40a40405)).toBe('uncertain');
		expect(severityOf(0x808c0000)).toBe('bad');
	});

	it('is stored signed and answered unsigned with the name of the standard’s table', () => {
		expect(toStored(STATUS_CODES.BadSensorFailure)).toBe(-2138308608);
		expect(toUnsigned(-2138308608)).toBe(0x808c0000);
		expect(qualityJson(toStored(STATUS_CODES.BadSensorFailure))).toEqual({
			code: 0x808c0000,
			name: 'BadSensorFailure',
			severity: 'bad',
		});
		expect(qualityJson(0x40aa0000).name).toBe('Uncertain');
	});

	// Source: OPC 10000-8 A.3.2.3 table A.3 and A.4.3.3 table A.7.
	it.each([192, 216, 64, 68, 80, 84, 88, 0, 4, 8, 12, 16, 24, 28, 32])('classic %d comes back unchanged', (classic) => {
		expect(statusToClassic(classicToStatus(classic))).toBe(classic);
	});

	it('last known goes one way only, and limit bits carry over', () => {
		expect(statusToClassic(classicToStatus(20))).toBe(28);
		expect(classicToStatus(193)).toBe(0x00000100);
		expect(statusToClassic(classicToStatus(195))).toBe(195);
	});
});
