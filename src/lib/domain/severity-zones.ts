// Pure.
import { ok, refuse, type Outcome } from './outcome.ts';

/** Zone boundaries of a published table, mm/s rms on non-rotating parts. */
export interface Zones {
	/** From a newly commissioned machine's zone to one for unrestricted running. */
	ab: number;
	/** From unrestricted running to running for a limited time only. */
	bc: number;
	/** From there to what is severe enough to damage. */
	cd: number;
	/** The table, such as `ISO 20816-3 group 1, rigid`. */
	table: string;
}

/** What the tables ask of a machine; null where nobody has said it. */
export interface ZoneMachine {
	kind: string | null;
	powerKw: number | null;
	speedRpm: number | null;
	/** ISO 20816-3 group; from the power where it is not given. */
	isoGroup: 1 | 2 | null;
	foundation: 'rigid' | 'flexible' | null;
	/** ISO 10816-7 category; makes the driven end a pump. */
	pumpCategory: 'I' | 'II' | null;
}

export type ZoneRefusal = 'no-power' | 'no-foundation' | 'no-speed' | 'too-slow' | 'too-small';

/** ISO 20816-3, boundaries by group and foundation, from memory; each checked against its displacement twin (severity-zones.test.ts). */
const ROTATING: Record<1 | 2, Record<'rigid' | 'flexible', readonly [number, number, number]>> = {
	1: { rigid: [2.3, 4.5, 7.1], flexible: [3.5, 7.1, 11] },
	2: { rigid: [1.4, 2.8, 4.5], flexible: [2.3, 4.5, 7.1] },
};

/** ISO 10816-7, boundaries by category, up to and above 200 kW, from memory. */
const PUMPS: Record<'I' | 'II', Record<'small' | 'large', readonly [number, number, number]>> = {
	I: { small: [2.5, 4, 6.6], large: [3.5, 5, 7.6] },
	II: { small: [3.2, 5.1, 8.5], large: [4.2, 6.1, 9.5] },
};

/** Below this neither table speaks: velocity tells little of a roll that turns once a second (scope of ISO 20816-3, from memory). */
const LEAST_SPEED_RPM = 120;
const LEAST_POWER_KW = 15;
const GROUP_1_ABOVE_KW = 300;
const LARGE_PUMP_ABOVE_KW = 200;

/**
 * Zones for a bearing of a machine: the pump's table for the driven end of a pump of stated category, else that of rotating machines.
 *
 * Units:    boundaries in mm/s rms over the band of `zoneBandHz`.
 * Source:   ISO 20816-3 and ISO 10816-7; which edition a site goes by is the site's to say, and the maker's figures come first.
 * Refusals: 'no-power', 'no-foundation', 'no-speed' for what the machine does not say; 'too-slow', 'too-small' where the tables end.
 */
export function zonesOf(machine: ZoneMachine, part: 'motor' | 'driven' | null): Outcome<Zones, ZoneRefusal> {
	const { powerKw, speedRpm, foundation, pumpCategory } = machine;
	if (powerKw === null) return refuse('no-power', 'the machine does not say its power in kW');
	if (speedRpm === null) return refuse('no-speed', 'the machine does not say its speed in r/min');
	if (speedRpm < LEAST_SPEED_RPM)
		return refuse('too-slow', `${speedRpm} r/min; the tables begin at ${LEAST_SPEED_RPM} r/min: use a baseline instead`);
	if (part === 'driven' && pumpCategory !== null) {
		const [ab, bc, cd] = PUMPS[pumpCategory][powerKw > LARGE_PUMP_ABOVE_KW ? 'large' : 'small'];
		const size = powerKw > LARGE_PUMP_ABOVE_KW ? 'above' : 'up to';
		return ok({ ab, bc, cd, table: `ISO 10816-7 category ${pumpCategory}, ${size} ${LARGE_PUMP_ABOVE_KW} kW` });
	}
	if (powerKw < LEAST_POWER_KW)
		return refuse('too-small', `${powerKw} kW; the table begins at ${LEAST_POWER_KW} kW: use a baseline instead`);
	if (foundation === null) return refuse('no-foundation', 'the machine does not say whether its foundation is rigid or flexible');
	const group = machine.isoGroup ?? (powerKw > GROUP_1_ABOVE_KW ? 1 : 2);
	const [ab, bc, cd] = ROTATING[group][foundation];
	return ok({ ab, bc, cd, table: `ISO 20816-3 group ${group}, ${foundation}` });
}

/** The band that the tables speak of: 10 to 1,000 Hz, from 2 Hz below 600 r/min (ISO 20816-3, from memory). */
export function zoneBandHz(speedRpm: number): readonly [number, number] {
	return [speedRpm < 600 ? 2 : 10, 1_000];
}

/**
 * Alert and danger from zones and the machine's own baseline: alert is the baseline plus a quarter of B/C, normally not above 1.25 times B/C;
 * danger stands at C/D.
 *
 * Units:  all in the unit of the zones.
 * Source: ISO 20816-1, setting of alarm and trip, from memory. Without a baseline alert stands at B/C.
 */
export function zoneLimits(zones: Zones, baseline: number | null): { alert: number; danger: number; isCapped: boolean } {
	if (baseline === null) return { alert: zones.bc, danger: zones.cd, isCapped: false };
	const wanted = baseline + 0.25 * zones.bc;
	const cap = 1.25 * zones.bc;
	return { alert: Math.min(wanted, cap), danger: Math.max(zones.cd, Math.min(wanted, cap)), isCapped: wanted > cap };
}
