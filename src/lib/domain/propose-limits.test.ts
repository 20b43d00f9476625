import { describe, expect, it } from 'vitest';
import { limitSchema } from './limit.ts';
import { proposeLimits, type Baseline, type ProposalInput } from './propose-limits.ts';

const baseline: Baseline = { n: 1_440, mean: 2, sigma: 0.1, from: 0, to: 86_400_000 };
const input = (extra: Partial<ProposalInput> = {}): ProposalInput => ({
	tag: 'HL-1.MDE.H.VEL',
	quantity: 'velocity',
	unit: 'mm/s',
	bandLowHz: 10,
	bandHighHz: 1_000,
	everyS: 60,
	machine: { kind: 'fan', powerKw: 315, speedRpm: 1_485, isoGroup: 1, foundation: 'rigid', pumpCategory: null },
	part: 'motor',
	perMmS: 1,
	baseline: null,
	...extra,
});
const values = (extra: Partial<ProposalInput>) =>
	proposeLimits(input(extra)).limits.map((limit) => [limit.kind, limit.level, limit.value]);

describe('a proposal', () => {
	it('of a velocity with a zone table and no history stands at its boundaries (ISO 20816-3 group 1, rigid, from memory)', () => {
		expect(values({})).toEqual([
			['high', 'alert', 4.5],
			['high', 'danger', 7.1],
		]);
	});

	it('of a velocity with history is the baseline plus a quarter of B/C (ISO 20816-1, from memory): 2 + 4.5/4 = 3.125', () => {
		expect(values({ baseline })[0]).toEqual(['high', 'alert', 3.13]); // three digits
	});

	it('is in the unit of the tag: 4.5 mm/s rms are 0.2505 in/s derived peak (25.4 mm an inch, sqrt 2)', () => {
		const perMmS = Math.SQRT2 / 25.4;
		expect(values({ perMmS, unit: '[in_i]/s' })[0]).toEqual(['high', 'alert', 0.251]);
		// A baseline in that unit is brought back to mm/s rms before the rule: 0.1114 in/s are 2.0 mm/s.
		expect(values({ perMmS, unit: '[in_i]/s', baseline: { ...baseline, mean: 2 * perMmS } })[0]).toEqual([
			'high',
			'alert',
			0.174,
		]);
	});

	it('takes no zone table for another band, a slow roll or a true peak, and says why; the baseline stands in', () => {
		for (const [extra, words] of [
			[{ bandHighHz: 500 }, '500 Hz'],
			[{ bandLowHz: null }, 'does not say the measured band'],
			[{ machine: { ...input().machine!, speedRpm: 85 } }, '85 r/min'],
			[{ perMmS: null }, 'rms velocity'],
			[{ machine: null }, 'names no machine'],
		] as [Partial<ProposalInput>, string][]) {
			const proposal = proposeLimits(input({ ...extra, baseline }));
			expect(proposal.limits.map((limit) => limit.kind)).toEqual(['deviation']);
			expect(proposal.reasons.join(' ')).toContain(words);
		}
	});

	it('of anything else is a deviation from its own baseline, and nothing without history or spread', () => {
		expect(proposeLimits(input({ quantity: 'temperature', baseline })).limits).toMatchObject([
			{ kind: 'deviation', value: 3, baseline: { mean: 2, sigma: 0.1, from: '1970-01-01T00:00:00.000Z' } },
		]);
		expect(proposeLimits(input({ quantity: 'temperature' })).limits).toEqual([]);
		expect(proposeLimits(input({ quantity: 'temperature', baseline: { ...baseline, sigma: 0 } })).limits).toEqual([]);
	});

	it('can be saved as it is, and one wild reading raises nothing', () => {
		const all = [
			input(),
			input({ baseline }),
			input({ quantity: 'battery', unit: '%' }),
			input({ quantity: 'impact', baseline }),
		];
		for (const limit of all.flatMap((one) => proposeLimits(one).limits)) {
			expect(limitSchema.safeParse(limit).error?.issues).toBeUndefined();
			if (limit.kind !== 'low') expect(limit.raise_after_s).toBeGreaterThan(60);
		}
	});
});
