// Pure.
import type { Limit } from '#lib/domain/limit.ts';
import { machineOf, POINTS } from '../scenario/layout.ts';
import type { Machine, Signal, SiteSlug } from '../scenario/parts.ts';
import { demoSignals } from './demo-map.ts';

/** Boundaries B/C and C/D of the zones, in mm/s rms. */
interface Zones {
	bc: number;
	cd: number;
	from: string;
}

/**
 * Zone boundaries for a bearing. Motors, blowers and fans: ISO 20816-3 by group and foundation; pumps: ISO 10816-7 by
 * category and power. Null where the standards do not reach, as for a roll of 85 r/min.
 */
export function zonesOf(machine: Machine, part: 'motor' | 'driven' | 'process'): Zones | null {
	const { powerKw, isoGroup, foundation, pumpCategory } = machine;
	if (part === 'driven' && pumpCategory !== null && powerKw !== null) {
		const from = `ISO 10816-7, category ${pumpCategory}`;
		if (pumpCategory === 'I') return powerKw > 200 ? { bc: 5, cd: 7.6, from } : { bc: 4, cd: 6.6, from };
		return powerKw > 200 ? { bc: 6.1, cd: 9.5, from } : { bc: 5.1, cd: 8.5, from };
	}
	if (isoGroup === null || foundation === null) return null;
	const from = `ISO 20816-3, group ${isoGroup}, ${foundation}`;
	if (isoGroup === 1) return foundation === 'rigid' ? { bc: 4.5, cd: 7.1, from } : { bc: 7.1, cd: 11, from };
	return foundation === 'rigid' ? { bc: 2.8, cd: 4.5, from } : { bc: 4.5, cd: 7.1, from };
}

/** A spike of one sample raises nothing: the next measurement has to hold too. */
function raiseAfter(signal: Signal): number {
	return signal.gateway === 'b' ? 10 : Math.ceil((signal.periodMs / 1_000) * 1.5);
}

/** Limits of a site: zones for velocity, and temperature, impacts and batteries. */
export function demoLimits(site: SiteSlug): Limit[] {
	return demoSignals(site).flatMap((signal) => limitsOf(signal));
}

function limitsOf(signal: Signal): Limit[] {
	const high = { tag: signal.path, kind: 'high', raise_after_s: raiseAfter(signal), clear_after_s: 60 } as const;
	switch (signal.trait) {
		case 'velocity': {
			const machine = machineOf(signal.site, signal.machine ?? '');
			const point = POINTS.find((one) => one.machine === signal.machine && one.name === signal.point);
			const zones = machine && point ? zonesOf(machine, point.part) : null;
			if (!zones) return [];
			return [
				{
					...high,
					level: 'alert',
					value: zones.bc,
					deadband: 0.2,
					origin: 'standard',
					note: `zone B/C, ${zones.from}`,
					cause: 'Unbalance, misalignment or a loose foundation',
					response: 'Compare with the other axes, then have the analyst look at it',
					respond_within_s: 28_800,
				},
				{
					...high,
					level: 'danger',
					value: zones.cd,
					deadband: 0.3,
					origin: 'standard',
					note: `zone C/D, ${zones.from}`,
					cause: 'Heavy unbalance, a damaged coupling or a bearing about to fail',
					consequence: 'Damage to bearings and seals within hours',
					response: 'Change over to the standby set and stop this one',
					respond_within_s: 1_800,
				},
			];
		}
		case 'temperature':
			return [
				{
					...high,
					level: 'alert',
					value: signal.point ? 80 : 120,
					deadband: 2,
					origin: 'site',
					response: 'Check lubrication and cooling',
					respond_within_s: 14_400,
				},
				{
					...high,
					level: 'danger',
					value: signal.point ? 95 : 145,
					deadband: 2,
					origin: 'site',
					cause: 'Lost lubrication or cooling, or overload',
					consequence: 'The bearing or the winding fails',
					response: 'Reduce the load, change over and stop the set',
					respond_within_s: 900,
				},
			];
		case 'impact':
			return [
				{
					...high,
					level: 'alert',
					value: 6,
					deadband: 0.5,
					origin: 'baseline',
					note: 'about three times what these bearings show when well',
					cause: 'Poor lubrication, or first damage where the impacts repeat',
					response: 'Grease by the plan; look at the share that repeats',
					respond_within_s: 86_400,
				},
			];
		case 'battery':
			return [
				{
					tag: signal.path,
					kind: 'low',
					level: 'alert',
					value: 20,
					deadband: 2,
					origin: 'site',
					response: 'Put the sensor on the next visit list',
					respond_within_s: 604_800,
				},
			];
		case 'trap-state':
			return [
				{
					tag: signal.path,
					kind: 'state',
					level: 'alert',
					state: 1,
					origin: 'site',
					response: 'Have the trap replaced at the next stop',
					respond_within_s: 604_800,
				},
			];
		default:
			return [];
	}
}
