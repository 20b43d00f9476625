// Pure.
import type { Address } from '#lib/domain/tag-map/address.ts';
import type { TagPlan } from '#lib/domain/tag-map/tag-plan.ts';

/** A tag as plain as one can be: every value stored as it comes, without limits. */
export function barePlan(siteId: number, tagId: number, address: Address): TagPlan {
	return {
		tagId,
		tag: `BENCH-${tagId}`,
		siteId,
		sourceId: 'bench',
		revision: 1,
		address,
		intervalMs: 1_000,
		scale: 1,
		offset: 0,
		rawUnit: 'mm/s',
		rawDetector: 'rms',
		unit: 'mm/s',
		detector: 'rms',
		frequencyHz: null,
		conversion: { factor: 1, offset: 0 },
		lowRange: null,
		highRange: null,
		deadband: null,
		expectedEveryS: null,
		staleAfterS: 60,
		frozenAfterS: null,
		timeTagId: null,
		ageTagId: null,
		validTagId: null,
		validWhen: null,
		sentinels: [],
		states: null,
		timePolicy: 'source',
		limits: [],
	};
}
