// Pure.
import { qualityJson, type QualityJson } from '#lib/domain/quality.ts';
import type { TagPlan } from '#lib/domain/tag-map/tag-plan.ts';
import type { Sample } from '#lib/pipeline/sources/source.ts';
import { normalize } from './normalize.ts';

/** What a row of a draft would read now. */
export interface DryReading {
	tag: string;
	value: number | null;
	unit: string;
	quality: QualityJson;
	/** Why there is no good value, or the bytes it came from. */
	detail: string;
}

/** Normalizes one sample by a row's plan, stored nowhere; without a sample it says that nothing came in time. */
export function toDryReading(plan: TagPlan, sample: Sample | undefined, now: number): DryReading {
	if (!sample) {
		return {
			tag: plan.tag,
			value: null,
			unit: plan.unit,
			quality: qualityJson(0x80320000),
			detail: 'nothing came within the time of the dry run',
		};
	}
	const reading = normalize(sample, plan, {
		now,
		rawEdge: 0,
		futureMs: 300_000,
		companion: () => undefined,
		unchangedSince: null,
	});
	const detail = [reading.reason, sample.fault?.detail, reading.wire].filter(Boolean).join('; ');
	return { tag: plan.tag, value: reading.value, unit: plan.unit, quality: qualityJson(reading.quality), detail };
}
