// Pure.
import { severityOf, STATUS_CODES } from '#lib/domain/quality.ts';
import type { RawScalar, Reading } from '#lib/domain/reading.ts';
import type { Reason } from '#lib/domain/reason.ts';
import type { TagPlan } from '#lib/domain/tag-map/tag-plan.ts';
import { decode } from '#lib/pipeline/decode/decode.ts';
import type { Sample } from '#lib/pipeline/sources/source.ts';
import { companionTime, isValidBy } from './companion.ts';
import { measuredAt } from './measured-at.ts';
import { GOOD, qualityOfFault, type Judged } from './quality-of.ts';

/** What a sample is judged against beside its tag: clocks, companions and how long the value has stood. */
export interface NormalizeContext {
	/** Wall clock, milliseconds. */
	now: number;
	/** Oldest time still kept as raw readings. */
	rawEdge: number;
	/** How far ahead a source's time may be. */
	futureMs: number;
	/** Newest raw scalar of another tag of the same source; undefined while it has none. */
	companion(tagId: number): RawScalar | undefined;
	/** Since when the raw value has not changed, milliseconds; null where it just changed or is not watched. */
	unchangedSince: number | null;
}

const REASON_OF_REFUSAL: Readonly<Record<string, Reason>> = {
	'path-missing': 'path-missing',
	'not-a-number-text': 'not-a-number-text',
};

/**
 * One reading of a sample: value = convert(raw × scale + offset), a quality by the first rule that matches, and one trusted time.
 * Order: transport, the source's own word, validity companion, sentinel and not-a-number, frozen, out of range, untrusted time or lost precision.
 */
export function normalize(sample: Sample, plan: TagPlan, context: NormalizeContext): Reading {
	let raw: RawScalar = null;
	let wire: string | null = null;
	let value: number | null = null;
	let judged: Judged | null = null;
	let sourceAt = sample.sourceAt;
	let sourceQuality = sample.sourceQuality;
	let isTimeUnreadable = false;

	if (sample.fault) judged = qualityOfFault(sample.fault);
	if (!judged || sample.fault?.code === 'source-bad') {
		if (sample.raw) {
			const decoded = decode(sample.raw, plan.address, plan.sentinels);
			if (decoded.ok) {
				({ raw, wire } = decoded.value);
				sourceAt = decoded.value.embeddedAt ?? sourceAt;
				sourceQuality = decoded.value.embeddedQuality ?? sourceQuality;
				isTimeUnreadable = decoded.value.isTimeUnreadable;
				if (!judged) {
					if (sourceQuality !== null && severityOf(sourceQuality) === 'bad')
						judged = { quality: sourceQuality >>> 0, reason: 'source-bad' };
					else if (!isValidBy(plan, context)) judged = { quality: STATUS_CODES.BadSensorFailure, reason: 'not-valid' };
					else if (decoded.value.isSentinel) judged = { quality: STATUS_CODES.BadSensorFailure, reason: 'sentinel' };
					else {
						const number = typeof raw === 'number' ? raw : typeof raw === 'boolean' ? (raw ? 1 : 0) : Number(raw);
						if (!Number.isFinite(number))
							judged = { quality: STATUS_CODES.BadSensorFailure, reason: Number.isNaN(number) ? 'nan' : 'infinite' };
						else {
							value = (number * plan.scale + plan.offset) * plan.conversion.factor + plan.conversion.offset;
							// -0 equals 0 everywhere but in a reading's identity.
							if (value === 0) value = 0;
							if (!Number.isFinite(value)) {
								value = null;
								judged = { quality: STATUS_CODES.BadSensorFailure, reason: 'infinite' };
							}
						}
					}
				}
			} else {
				wire = decoded.wire ?? null;
				judged ??= { quality: STATUS_CODES.BadDecodingError, reason: REASON_OF_REFUSAL[decoded.reason] ?? 'undecodable' };
			}
		} else if (!judged) {
			judged =
				sourceQuality !== null && severityOf(sourceQuality) === 'bad'
					? { quality: sourceQuality >>> 0, reason: 'source-bad' }
					: { quality: STATUS_CODES.BadDecodingError, reason: 'undecodable' };
		}
	}

	const companionAt = companionTime(plan, context, sample.receivedAt);
	const time = measuredAt(
		companionAt ?? sourceAt,
		sample.receivedAt,
		{ now: context.now, rawEdge: context.rawEdge, futureMs: context.futureMs },
		companionAt === null ? plan.timePolicy : plan.timePolicy === 'hub' ? 'source' : plan.timePolicy,
	);
	judged ??= judgeValue(sample, plan, context, raw, value, sourceQuality, time.isUntrusted || isTimeUnreadable);

	return {
		tagId: plan.tagId,
		at: time.at,
		value: severityOf(judged.quality) === 'bad' ? null : value,
		quality: judged.quality,
		timeFrom: time.timeFrom,
		receivedAt: Math.floor(sample.receivedAt),
		sourceAt: time.sourceAt,
		reason: judged.reason,
		raw,
		wire,
		revision: plan.revision,
	};
}

/** Rules 5 to 7, for a value that is there: frozen, out of range, untrusted time or lost precision; then the source's own uncertainty. */
function judgeValue(
	sample: Sample,
	plan: TagPlan,
	context: NormalizeContext,
	raw: RawScalar,
	value: number | null,
	sourceQuality: number | null,
	isTimeUntrusted: boolean,
): Judged {
	if (sourceQuality !== null && severityOf(sourceQuality) === 'uncertain')
		return { quality: sourceQuality >>> 0, reason: 'source-uncertain' };
	if (
		plan.frozenAfterS !== null &&
		context.unchangedSince !== null &&
		sample.receivedAt - context.unchangedSince >= plan.frozenAfterS * 1_000
	) {
		return { quality: STATUS_CODES.UncertainLastUsableValue, reason: 'frozen' };
	}
	if (
		value !== null &&
		((plan.lowRange !== null && value < plan.lowRange) || (plan.highRange !== null && value > plan.highRange))
	) {
		return { quality: STATUS_CODES.UncertainEngineeringUnitsExceeded, reason: 'out-of-range' };
	}
	if (isTimeUntrusted) return { quality: STATUS_CODES.UncertainSubNormal, reason: 'source-time' };
	if (typeof raw === 'bigint') return { quality: STATUS_CODES.UncertainSubNormal, reason: 'precision' };
	// A retained message without a time of its own: nobody knows how old the value is.
	if (sample.retained && sample.sourceAt === null) return { quality: STATUS_CODES.UncertainLastUsableValue, reason: 'retained' };
	return sourceQuality !== null && sourceQuality !== 0 ? { quality: sourceQuality >>> 0, reason: null } : GOOD;
}
