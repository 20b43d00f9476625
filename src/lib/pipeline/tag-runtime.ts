// Edge: pipeline. One tag while it runs: plan, memory between samples. May touch: the pure stages, store types.
import { severityOf, STATUS_CODES } from '#lib/domain/quality.ts';
import type { RawScalar, Reading, Verdict } from '#lib/domain/reading.ts';
import type { TagPlan } from '#lib/domain/tag-map/tag-plan.ts';
import { confirm, freshState, goStale, judge, type AlarmChange, type JudgingState } from '#lib/pipeline/evaluate/evaluate.ts';
import { freshStretch, judgeLate, MOST_LATE, type LateStretch } from '#lib/pipeline/evaluate/judge-late.ts';
import { shouldStore, type LastStored } from '#lib/pipeline/normalize/deadband.ts';
import { normalize, type NormalizeContext } from '#lib/pipeline/normalize/normalize.ts';
import { rawToStore } from '#lib/pipeline/normalize/raw-to-store.ts';
import type { Fault, Sample } from '#lib/pipeline/sources/source.ts';
import type { LatestUpdate, StoredReading, TagAlarmChange } from '#lib/pipeline/store/write-batch.ts';

/** What a tag remembered before this process began. */
export interface TagMemory {
	judging: JudgingState | null;
	latest: LatestUpdate | null;
}

/** Where a tag's results go: the batch being filled. */
export interface Sink {
	readings: StoredReading[];
	alarmChanges: TagAlarmChange[];
	touchJudging(tag: TagRuntime): void;
	touchLatest(tag: TagRuntime): void;
	touchConfirmed(tag: TagRuntime): void;
	/** The tag has late readings that wait to be judged as one stretch. */
	touchLate(tag: TagRuntime): void;
}

export interface StageClock {
	/** Wall clock, ms. */
	now: number;
	/** Monotonic, ms: freshness counts by this. */
	mono: number;
	rawEdge: number;
}

/** Two looks at one measurement by its age in whole seconds differ by at most this. */
const AGE_JITTER_MS = 2_000;

/** A fault that means nobody answered; any other bad reading is still word from the device. */
function isSilence(fault: Fault | null): boolean {
	if (!fault) return false;
	return fault.code === 'exception'
		? fault.exception === 10 || fault.exception === 11
		: fault.code === 'no-answer' || fault.code === 'no-connection' || fault.code === 'source-offline';
}

export class TagRuntime {
	plan: TagPlan;
	judging: JudgingState | null;
	latest: LatestUpdate | null;
	/** The newest raw scalar, for companions. */
	lastRaw: RawScalar | undefined;
	/** Since when the raw scalar has stood, by the time of receipt. */
	rawSince: number | null = null;
	aliveMono: number;
	isStale: boolean;
	duplicates = 0;
	/** The stale alarm was suppressed as a consequence of its lost source. */
	isSuppressed = false;
	#lastStored: LastStored | null = null;
	/** The newest reading; kept while stale, since the source may say that it still stands. */
	#last: Pick<Reading, 'at' | 'value' | 'quality' | 'receivedAt'> | null = null;
	#heldBack: TagAlarmChange[] = [];
	#late: LateStretch | null = null;
	#lateMono = 0;

	constructor(plan: TagPlan, memory: TagMemory, mono: number) {
		this.plan = plan;
		this.judging = memory.judging;
		this.latest = memory.latest;
		this.aliveMono = mono;
		this.isStale = memory.latest?.isStale ?? false;
		// Held back before a restart, and neither raised nor forgotten by it.
		if (this.isStale && memory.judging?.heldBack) {
			this.#heldBack = memory.judging.heldBack.map((change) => this.#own(change));
			this.isSuppressed = true;
		}
		// A source that reports changes says its last value again after a restart: that is no new reading.
		if (memory.latest && !this.isStale) this.#last = memory.latest;
	}

	/** Takes one sample through decode, normalize, judge and deadband. Answers whether it brought a usable value. */
	take(sample: Sample, companion: NormalizeContext['companion'], clock: StageClock, sink: Sink): boolean {
		if (sample.confirms) return this.isStale ? this.#standAgain(sample, clock, sink) : this.#confirm(clock, sink);
		const context: NormalizeContext = {
			now: clock.now,
			rawEdge: clock.rawEdge,
			futureMs: 300_000,
			companion,
			unchangedSince: this.rawSince,
		};
		const reading = normalize(sample, this.plan, context);
		if (reading.raw !== null) {
			if (this.lastRaw === undefined || !Object.is(this.lastRaw, reading.raw)) this.rawSince = sample.receivedAt;
			this.lastRaw = reading.raw;
		}
		const isUsable = severityOf(reading.quality) !== 'bad';
		// A retained message may be of any age: it says what the value was, not that the source lives.
		if (!sample.retained && (isUsable || !isSilence(sample.fault))) this.aliveMono = clock.mono;
		if (this.isStale && isUsable && !sample.retained && this.latest?.at === reading.at && this.latest.value === reading.value) {
			this.#judgeAndStore(readAgain(reading), sample, clock, sink);
			return true;
		}
		const last = this.#last;
		if (!this.isStale && last && reading.at === last.at && reading.value === last.value && reading.quality === last.quality) {
			this.duplicates += 1;
			return this.#confirm(clock, sink) || isUsable;
		}
		if (last && this.#isSameMeasurement(reading, last, sample)) return this.#confirm(clock, sink) || isUsable;
		this.#judgeAndStore(reading, sample, clock, sink);
		return isUsable;
	}

	/** Polled again before the sensor has measured again: the same value is the same measurement. */
	#isSameMeasurement(reading: Reading, last: Pick<Reading, 'at' | 'value' | 'quality' | 'receivedAt'>, sample: Sample): boolean {
		if (this.isStale || reading.value !== last.value || reading.quality !== last.quality) return false;
		if (this.plan.ageTagId !== null && Math.abs(reading.at - last.at) <= AGE_JITTER_MS) return true;
		return (
			this.plan.expectedEveryS !== null &&
			reading.timeFrom === 'hub' &&
			sample.receivedAt - last.receivedAt < this.plan.expectedEveryS * 1_000
		);
	}

	#judgeAndStore(reading: Reading, sample: Sample, clock: StageClock, sink: Sink): void {
		const { plan } = this;
		const isSilent = sample.retained === true && reading.timeFrom === 'hub';
		const resets = this.judging?.lastAt != null && this.judging.lastAt > clock.now && reading.at <= this.judging.lastAt;
		const judged = isSilent
			? { verdict: 'unknown' as Verdict, state: this.judging, changes: [], isLimitEdge: false, isLate: false }
			: judge(reading, plan, this.judging, { now: clock.now });
		if (judged.isLate && plan.limits.length > 0) {
			this.#late ??= freshStretch();
			this.#late.readings.push(reading);
			this.#lateMono = clock.mono;
			sink.touchLate(this);
			if (this.#late.readings.length >= MOST_LATE) this.judgeLate(clock, sink, false);
		}
		if (judged.state !== this.judging) {
			this.judging = judged.state;
			if (plan.limits.length > 0) sink.touchJudging(this);
		}
		for (const change of judged.changes)
			sink.alarmChanges.push({ ...change, tagId: plan.tagId, siteId: plan.siteId, isTest: false });
		if (judged.isLate || judged.isLimitEdge || this.isStale || shouldStore(reading, this.#lastStored, plan.deadband)) {
			sink.readings.push({ ...reading, siteId: plan.siteId, rawKept: rawToStore(reading.raw, reading.value, plan) });
			if (!judged.isLate) this.#lastStored = { at: reading.at, value: reading.value, quality: reading.quality };
		}
		if (judged.isLate) return;
		this.#last = reading;
		this.isStale = false;
		this.isSuppressed = false;
		// A bad reading ends the silence but not the stale alarm that was held back.
		this.#heldBack = (this.judging?.heldBack ?? []).map((change) => this.#own(change));
		this.latest = {
			tagId: plan.tagId,
			at: reading.at,
			value: reading.value,
			quality: reading.quality,
			receivedAt: reading.receivedAt,
			confirmedAt: reading.receivedAt,
			isHubTime: reading.timeFrom === 'hub',
			sourceAt: reading.sourceAt,
			reason: reading.reason,
			raw: reading.raw === null ? null : String(reading.raw),
			wire: reading.wire,
			verdict: judged.verdict,
			isStale: false,
			revision: reading.revision,
			resets,
		};
		sink.touchLatest(this);
	}

	/** True when nothing late has come for `quietMs`: the stretch is over. */
	isLateOver(mono: number, quietMs: number): boolean {
		return mono - this.#lateMono >= quietMs;
	}

	/** Judges the late readings that wait, as one stretch; alarms are recorded as found afterwards. */
	judgeLate(clock: StageClock, sink: Pick<Sink, 'alarmChanges'>, isEnd: boolean): void {
		if (!this.#late) return;
		const { plan } = this;
		const { stretch, found } = judgeLate(this.#late, plan, clock.now, isEnd);
		this.#late = isEnd ? null : stretch;
		sink.alarmChanges.push(...found.map((change) => ({ ...change, tagId: plan.tagId, siteId: plan.siteId, isTest: false })));
	}

	/** A stale tag's source confirms its last value: the value stands again, and receivers that were told of the silence are told so. */
	#standAgain(sample: Sample, clock: StageClock, sink: Sink): boolean {
		const { latest } = this;
		const last = this.#last;
		if (!latest || !last || latest.value === null || severityOf(last.quality) === 'bad') return false;
		this.aliveMono = clock.mono;
		const reading: Reading = {
			tagId: this.plan.tagId,
			at: last.at,
			value: latest.value,
			quality: last.quality,
			timeFrom: latest.isHubTime ? 'hub' : 'source',
			receivedAt: Math.floor(sample.receivedAt),
			sourceAt: latest.sourceAt,
			reason: null,
			raw: this.lastRaw ?? null,
			wire: latest.wire,
			revision: this.plan.revision,
		};
		this.#judgeAndStore(readAgain(reading), sample, clock, sink);
		return true;
	}

	#confirm(clock: StageClock, sink: Sink): boolean {
		const { latest } = this;
		if (!latest || severityOf(latest.quality) === 'bad' || this.isStale) return false;
		this.aliveMono = clock.mono;
		latest.confirmedAt = clock.now;
		sink.touchConfirmed(this);
		if (this.judging && this.plan.limits.length > 0) {
			const { state, changes, verdict } = confirm(this.judging, this.plan, clock.now);
			this.judging = state;
			if (changes.length > 0) {
				for (const change of changes)
					sink.alarmChanges.push({ ...change, tagId: this.plan.tagId, siteId: this.plan.siteId, isTest: false });
				latest.verdict = verdict;
				sink.touchJudging(this);
				sink.touchLatest(this);
			}
		}
		return true;
	}

	/** Raises the stale alarm that was held back while its source was lost. */
	raiseStale(sink: Sink): void {
		this.isSuppressed = false;
		sink.alarmChanges.push(...this.#heldBack);
		this.#heldBack = [];
		if (!this.judging?.heldBack) return;
		const { heldBack: _, ...state } = this.judging;
		this.judging = state;
		sink.touchJudging(this);
	}

	#own(change: AlarmChange): TagAlarmChange {
		return { ...change, tagId: this.plan.tagId, siteId: this.plan.siteId, isTest: false };
	}

	/** True when nothing has come for the stale time. */
	isOverdue(mono: number): boolean {
		return !this.isStale && mono - this.aliveMono > this.plan.staleAfterS * 1_000;
	}

	/** The silence goes on: stale limits with seconds of their own may be due by now. */
	stayStale(clock: StageClock, sink: Sink): void {
		if (this.plan.limits.some((limit) => limit.kind === 'stale' && limit.value != null)) this.#judgeSilence(clock, sink);
	}

	#judgeSilence(clock: StageClock, sink: Sink): void {
		const { plan } = this;
		const { state, changes } = goStale(this.judging ?? freshState(), plan, clock.now, (clock.mono - this.aliveMono) / 1_000);
		if (changes.length > 0 || !this.judging?.isStale) sink.touchJudging(this);
		this.judging = state;
		this.#heldBack.push(...changes.map((change) => this.#own(change)));
		if (!this.isSuppressed) this.raiseStale(sink);
		else if (changes.length > 0) this.judging = { ...state, heldBack: [...(state.heldBack ?? []), ...changes] };
	}

	/** Says once that the tag went stale: a reading without value for the feed, the last value kept as uncertain. `suppress` keeps its stale alarm back. */
	goStale(clock: StageClock, sink: Sink, suppress: boolean): void {
		const { plan } = this;
		this.isStale = true;
		this.isSuppressed = suppress;
		const reading: StoredReading = {
			siteId: plan.siteId,
			tagId: plan.tagId,
			at: clock.now,
			value: null,
			quality: STATUS_CODES.BadNoCommunication,
			timeFrom: 'hub',
			receivedAt: clock.now,
			sourceAt: null,
			reason: 'stale',
			raw: null,
			rawKept: null,
			wire: null,
			revision: plan.revision,
		};
		sink.readings.push(reading);
		this.#lastStored = { at: clock.now, value: null, quality: reading.quality };
		// A tag that never brought a value is missed as well.
		if (plan.limits.length > 0) {
			this.#judgeSilence(clock, sink);
		}
		if (this.latest) {
			this.latest = {
				...this.latest,
				quality: this.latest.value === null ? this.latest.quality : STATUS_CODES.UncertainLastUsableValue,
				reason: 'stale',
				verdict: 'unknown',
				isStale: true,
			};
		} else {
			this.latest = {
				tagId: plan.tagId,
				at: clock.now,
				value: null,
				quality: STATUS_CODES.BadNoCommunication,
				receivedAt: clock.now,
				confirmedAt: clock.now,
				isHubTime: true,
				sourceAt: null,
				reason: 'stale',
				raw: null,
				wire: null,
				verdict: 'unknown',
				isStale: true,
				revision: plan.revision,
				resets: false,
			};
		}
		sink.touchLatest(this);
	}
}

/** The last value, said again after a silence. Its identity is stored already, so it stands at the time it was read again, its own time kept beside it. */
function readAgain(reading: Reading): Reading {
	if (reading.timeFrom === 'hub') return { ...reading, at: reading.receivedAt };
	return { ...reading, at: reading.receivedAt, timeFrom: 'hub', sourceAt: reading.at };
}
