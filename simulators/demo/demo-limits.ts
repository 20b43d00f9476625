// Pure.
import type { Limit } from '#lib/domain/limit.ts';
import { zonesOf } from '#lib/domain/severity-zones.ts';
import { machineOf, POINTS } from '../scenario/layout.ts';
import type { Signal, SiteSlug } from '../scenario/parts.ts';
import { demoSignals } from './demo-map.ts';

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
			const found = machine && point && point.part !== 'process' ? zonesOf(machine, point.part) : null;
			// The tables do not reach a roll of 85 r/min.
			if (!found?.ok) return [];
			const zones = found.value;
			return [
				{
					...high,
					level: 'alert',
					value: zones.bc,
					deadband: 0.2,
					origin: 'standard',
					note: `zone B/C, ${zones.table}`,
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
					note: `zone C/D, ${zones.table}`,
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
