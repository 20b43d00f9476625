// Pure.
import type { Limit } from './limit.ts';
import { zoneBandHz, zoneLimits, zonesOf, type ZoneMachine } from './severity-zones.ts';

/** Statistics of a tag's good readings outside its alarms, in the tag's unit. */
export interface Baseline {
	n: number;
	mean: number;
	/** Sample standard deviation. */
	sigma: number;
	/** First and last reading, ms. */
	from: number;
	to: number;
}

/** What a proposal goes by. */
export interface ProposalInput {
	tag: string;
	quantity: string | null;
	unit: string;
	bandLowHz: number | null;
	bandHighHz: number | null;
	/** How often the sensor measures, seconds: one wild reading must not raise an alarm. */
	everyS: number;
	machine: ZoneMachine | null;
	part: 'motor' | 'driven' | null;
	/** Tag's unit and detector for one mm/s rms; null where they do not measure a velocity or are a true peak. */
	perMmS: number | null;
	/** Null where history holds too little. */
	baseline: Baseline | null;
}

export interface Proposal {
	tag: string;
	limits: Limit[];
	/** What it goes by, and what stood in the way: sentences for a person. */
	reasons: string[];
}

/** Fewest readings, and shortest stretch, that a baseline is made of: a shift's worth and its night. */
export const LEAST_READINGS = 100;
export const LEAST_SPAN_MS = 20 * 3_600_000;
/** Sigmas of a deviation limit; common practice for a first setting. */
const SIGMAS = 3;
/** Charge at which a battery goes on the next visit list; common practice. */
const BATTERY_PERCENT = 20;

const rounded = (value: number) => Number(value.toPrecision(3));

/**
 * Limits that a tag could have: from a published zone table where one fits, moved by the machine's own baseline, else from the baseline alone.
 * Proposes only; a qualified person decides.
 */
export function proposeLimits(input: ProposalInput): Proposal {
	const delays = {
		raise_after_s: Math.max(10, Math.ceil(input.everyS * 1.5)),
		clear_after_s: Math.max(60, Math.ceil(input.everyS * 1.5)),
	};
	if (input.quantity === 'velocity') {
		const proposal = fromZones(input, delays);
		if (proposal.limits.length > 0) return proposal;
		const own = fromBaseline(input, delays);
		return { ...own, reasons: [...proposal.reasons, ...own.reasons] };
	}
	if (input.quantity === 'battery' && input.unit === '%') {
		return {
			tag: input.tag,
			limits: [
				{
					tag: input.tag,
					kind: 'low',
					level: 'alert',
					value: BATTERY_PERCENT,
					deadband: 2,
					origin: 'site',
					note: 'usual charge for a visit; the maker of the sensor says better',
					cause: 'The battery runs down',
					response: 'Put the sensor on the next visit list',
					respond_within_s: 7 * 86_400,
				},
			],
			reasons: [`A charge of ${BATTERY_PERCENT} % leaves time for a visit; common practice.`],
		};
	}
	if (input.quantity === 'state')
		return { tag: input.tag, limits: [], reasons: ['Which state is an alarm is for the site to say.'] };
	return fromBaseline(input, delays);
}

interface Delays {
	raise_after_s: number;
	clear_after_s: number;
}

function fromZones(input: ProposalInput, delays: Delays): Proposal {
	const none = (reason: string): Proposal => ({ tag: input.tag, limits: [], reasons: [reason] });
	const { machine, baseline, perMmS } = input;
	if (!machine) return none('No zone table: the row names no machine.');
	if (perMmS === null) return none('No zone table: the tables are for rms velocity, and this tag does not convert to it.');
	const zones = zonesOf(machine, input.part);
	if (!zones.ok) return none(`No zone table: ${zones.detail ?? zones.reason}.`);
	const [low, high] = zoneBandHz(machine.speedRpm ?? 0);
	if (input.bandLowHz === null || input.bandHighHz === null)
		return none(`No zone table: the row does not say the measured band; the table asks for ${low} to ${high} Hz.`);
	if (input.bandLowHz > low || input.bandHighHz < high)
		return none(
			`No zone table: measured from ${input.bandLowHz} to ${input.bandHighHz} Hz; the table asks for ${low} to ${high} Hz.`,
		);
	const { alert, danger, isCapped } = zoneLimits(zones.value, baseline ? baseline.mean / perMmS : null);
	const { bc, cd, table } = zones.value;
	const alertNote = baseline
		? `baseline ${rounded(baseline.mean / perMmS)} plus a quarter of B/C ${bc} mm/s rms${isCapped ? ', held at 1.25 times B/C' : ''}; ${table}`
		: `zone B/C ${bc} mm/s rms, ${table}`;
	const common = { tag: input.tag, kind: 'high', origin: 'standard', ...delays } as const;
	return {
		tag: input.tag,
		limits: [
			{
				...common,
				level: 'alert',
				value: rounded(alert * perMmS),
				deadband: rounded(alert * perMmS * 0.05),
				note: alertNote,
				cause: 'Unbalance, misalignment or a loose foundation',
				response: 'Compare with the other axes, then have the analyst look at it',
				respond_within_s: 8 * 3_600,
			},
			{
				...common,
				level: 'danger',
				value: rounded(danger * perMmS),
				deadband: rounded(danger * perMmS * 0.05),
				note: `zone C/D ${cd} mm/s rms, ${table}`,
				cause: 'Heavy unbalance, a damaged coupling or a bearing about to fail',
				consequence: 'Damage to bearings and seals',
				response: 'Follow the site’s procedure for taking the machine out of service',
				respond_within_s: 1_800,
			},
		],
		reasons: [
			`${table}: B/C ${bc}, C/D ${cd} mm/s rms.`,
			baseline ? describe(baseline, input.unit) : 'Too little history for a baseline: alert stands at the boundary itself.',
		],
	};
}

function fromBaseline(input: ProposalInput, delays: Delays): Proposal {
	const { baseline } = input;
	if (!baseline)
		return {
			tag: input.tag,
			limits: [],
			reasons: [
				`Too little history: a baseline asks for at least ${LEAST_READINGS} good readings over ${LEAST_SPAN_MS / 3_600_000} h outside alarms.`,
			],
		};
	if (!(baseline.sigma > 0)) return { tag: input.tag, limits: [], reasons: ['The value never changed: no spread to go by.'] };
	return {
		tag: input.tag,
		limits: [
			{
				tag: input.tag,
				kind: 'deviation',
				level: 'alert',
				value: SIGMAS,
				...delays,
				baseline: {
					mean: baseline.mean,
					sigma: baseline.sigma,
					from: new Date(baseline.from).toISOString(),
					to: new Date(baseline.to).toISOString(),
				},
				origin: 'baseline',
				note: `${SIGMAS} sigma from the mean of ${baseline.n} readings`,
				cause: 'The machine runs otherwise than in its baseline',
				response: 'Compare with load and speed, then have the analyst look at it',
				respond_within_s: 86_400,
			},
		],
		reasons: [describe(baseline, input.unit)],
	};
}

function describe(baseline: Baseline, unit: string): string {
	const days = (baseline.to - baseline.from) / 86_400_000;
	return `Baseline of ${baseline.n} good readings over ${days.toFixed(1)} days outside alarms: mean ${rounded(baseline.mean)}, sigma ${rounded(baseline.sigma)} ${unit}.`;
}
