// Edge: pipeline. Lists the stages in order: decode → normalize → judge → deadband → write; one bounded queue; sheds load visibly, never silently.
import type { TagPlan } from '#lib/domain/tag-map/tag-plan.ts';
import { RETENTION } from '#lib/domain/retention.ts';
import type { EmitAnswer, Sample } from '#lib/pipeline/sources/source.ts';
import type { CopyWriter } from '#lib/pipeline/store/copy-writer.ts';
import { rawEdgeOf } from '#lib/pipeline/store/partitions.ts';
import type { Spool } from '#lib/pipeline/store/spool.ts';
import type { ConnectionChange, FeedEvent, StoredReading, TagAlarmChange, WriteBatch } from '#lib/pipeline/store/write-batch.ts';
import { LossLedger } from './loss-ledger.ts';
import { Outlet, type OutletCounts } from './outlet.ts';
import { TagRuntime, type Sink, type StageClock, type TagMemory } from './tag-runtime.ts';

/** A commit at least this often, and at least every so many readings; rarer into the spool, where each costs a flush of the disk. */
const FLUSH_MS = 100;
const SPOOL_FLUSH_MS = 250;
const FLUSH_READINGS = 10_000;
/** Most readings that wait in memory; what comes beyond is dropped, counted and shown. */
const MOST_WAITING = 200_000;
/** Latest values are written at most once a second a tag, confirmations more rarely: they change only an age. */
const LATEST_MS = 1_000;
const CONFIRM_MS = 5_000;
/** Late readings of a tag are one stretch until none has come for this long. */
const LATE_QUIET_MS = 10_000;

export interface PipelineCounts extends OutletCounts {
	waiting: number;
	/** Samples taken since the start. */
	taken: number;
}

export interface PipelineOptions {
	/** Keeps what is judged while the database is away; without one it waits in memory. */
	spool?: Spool | null;
	losses?: LossLedger;
	/** Called with tags whose memory changed: at once after a change of an alarm, else every few seconds. For the cache in the data folder. */
	remember?(tags: Iterable<TagRuntime>): void;
}

interface Pending extends Sink {
	readings: StoredReading[];
	alarmChanges: TagAlarmChange[];
	connections: ConnectionChange[];
	events: FeedEvent[];
	testReadings: { siteId: number; tagId: number; at: number; value: number; quality: number }[];
	judging: Set<TagRuntime>;
	resolvers: ((answer: EmitAnswer) => void)[];
	/** Refused samples are answered once their loss is written down. */
	refused: { resolve(answer: EmitAnswer): void; answer: EmitAnswer }[];
}

function hasWork(pending: Pending): boolean {
	return (
		pending.readings.length +
			pending.alarmChanges.length +
			pending.connections.length +
			pending.events.length +
			pending.testReadings.length +
			pending.judging.size +
			pending.resolvers.length +
			pending.refused.length >
		0
	);
}

/** The middle of a reading's journey, for all sources of this process. */
export class Pipeline {
	readonly counts: PipelineCounts = { stored: 0, duplicates: 0, deadLetters: 0, spooled: 0, dropped: 0, waiting: 0, taken: 0 };
	readonly tags = new Map<number, TagRuntime>();
	/** Days that raw readings are kept, the longest of all tags; a source's time before that is not to be trusted. */
	rawDays = RETENTION.rawDays;
	readonly spool: Spool | null;
	/** What was let go and is not told yet. */
	readonly losses: LossLedger;
	readonly #now: () => number;
	readonly #outlet: Outlet;
	readonly #remember: NonNullable<PipelineOptions['remember']>;
	/** Tags that are gone are known here still: what of them waits has a source. */
	readonly #sources = new Map<number, string>();
	#pending: Pending;
	#latest = new Set<TagRuntime>();
	#confirmed = new Set<TagRuntime>();
	#late = new Set<TagRuntime>();
	#unremembered = new Set<TagRuntime>();
	#latestAt = 0;
	#confirmedAt = 0;
	#wasDown = false;
	#timer: NodeJS.Timeout | undefined;
	#writing: Promise<void> | null = null;
	#writingCount = 0;

	constructor(writer: CopyWriter, now: () => number, options: PipelineOptions = {}) {
		this.#now = now;
		this.spool = options.spool ?? null;
		this.losses = options.losses ?? this.spool?.losses ?? new LossLedger();
		this.#remember = options.remember ?? (() => undefined);
		this.#outlet = new Outlet({
			writer,
			counts: this.counts,
			losses: this.losses,
			spool: this.spool,
			sourceOf: (tagId) => this.#sources.get(tagId) ?? '',
		});
		this.#outlet.isBehind = () => this.#pending.readings.length >= FLUSH_READINGS / 2;
		this.#pending = this.#fresh();
	}

	#fresh(): Pending {
		const judging = new Set<TagRuntime>();
		return {
			readings: [],
			alarmChanges: [],
			connections: [],
			events: [],
			testReadings: [],
			judging,
			resolvers: [],
			refused: [],
			touchJudging: (tag) => {
				judging.add(tag);
				this.#unremembered.add(tag);
			},
			touchLatest: (tag) => {
				this.#latest.add(tag);
				this.#unremembered.add(tag);
			},
			touchConfirmed: (tag) => this.#confirmed.add(tag),
			touchLate: (tag) => this.#late.add(tag),
		};
	}

	/** True while the database does not take what is written. */
	get isDown(): boolean {
		return this.#outlet.isDown;
	}

	/** The first look whether the database is there. `onReturn` runs then, and whenever it answers again, before anything is written. */
	begin(onReturn: () => Promise<void>): Promise<boolean> {
		this.#outlet.onReturn = onReturn;
		return this.#outlet.begin();
	}

	clock(): StageClock {
		const now = this.#now();
		return { now, mono: performance.now(), rawEdge: rawEdgeOf(now, this.rawDays) };
	}

	/** Takes a tag up, or its new plan; a tag that was running keeps what it remembers. */
	setTag(plan: TagPlan, memory: TagMemory): TagRuntime {
		this.#sources.set(plan.tagId, plan.sourceId);
		const known = this.tags.get(plan.tagId);
		if (known) {
			const isOtherValue = known.plan.unit !== plan.unit || known.plan.detector !== plan.detector;
			if (!isOtherValue) {
				known.plan = plan;
				return known;
			}
		}
		const tag = new TagRuntime(plan, known ? { judging: null, latest: null } : memory, performance.now());
		this.tags.set(plan.tagId, tag);
		return tag;
	}

	/** Lets a tag go; what of it is waiting is still written. */
	dropTag(tagId: number): void {
		const tag = this.tags.get(tagId);
		if (!tag) return;
		this.tags.delete(tagId);
		this.#latest.delete(tag);
		this.#confirmed.delete(tag);
		this.#unremembered.delete(tag);
		if (this.#late.delete(tag)) tag.judgeLate(this.clock(), this.#pending, true);
	}

	/** Judges the late stretches that are over; all of them when this process stops. */
	#judgeLate(isStopping: boolean): void {
		const clock = this.clock();
		for (const tag of this.#late) {
			if (!isStopping && !tag.isLateOver(clock.mono, LATE_QUIET_MS)) continue;
			this.#late.delete(tag);
			tag.judgeLate(clock, this.#pending, true);
		}
	}

	/**
	 * Takes samples through the stages. The answer comes with the commit that holds them, in the database or in the spool, so that a source may
	 * acknowledge; when neither has room they are refused before they are judged, and the answer says so.
	 */
	accept(samples: readonly Sample[], onSample?: (isUsable: boolean, isDuplicate: boolean) => void): Promise<EmitAnswer> {
		this.counts.taken += samples.length;
		if (this.#outlet.isFull) return this.#refuse(samples, 'spool-full', 'the database is away and the spool is full');
		if (this.counts.waiting + samples.length > MOST_WAITING)
			return this.#refuse(samples, 'queue-full', 'the database has been away too long and the queue is full');
		const clock = this.clock();
		const pending = this.#pending;
		const companion = (tagId: number) => this.tags.get(tagId)?.lastRaw;
		// Companions first: a value is judged by the age and status that came with it.
		for (const sample of samples) {
			const tag = this.tags.get(sample.key);
			if (!tag) continue;
			const known = tag.duplicates;
			const isUsable = tag.take(sample, companion, clock, pending);
			const isDuplicate = tag.duplicates > known;
			if (isDuplicate) this.counts.duplicates += 1;
			onSample?.(isUsable, isDuplicate);
		}
		this.#schedule(pending);
		return new Promise((resolve) => pending.resolvers.push(resolve));
	}

	/** Counts samples as lost by their source. The source did speak: its tags do not go stale for it. */
	#refuse(samples: readonly Sample[], reason: 'spool-full' | 'queue-full', text: string): Promise<EmitAnswer> {
		const { now, mono } = this.clock();
		const readings = samples.filter((sample) => !sample.confirms);
		for (const sample of samples) {
			const tag = this.tags.get(sample.key);
			if (tag && !sample.fault) tag.aliveMono = mono;
		}
		for (const { key } of readings) this.losses.add(this.#sources.get(key) ?? '', reason, 1, now);
		this.counts.dropped += readings.length;
		const answer: EmitAnswer = { dropped: readings.length, reason: text };
		const pending = this.#pending;
		this.#schedule(pending);
		return new Promise((resolve) => pending.refused.push({ resolve, answer }));
	}

	/** Work that is not a source's sample: going stale, test values, connections. */
	add(work: (pending: Sink & Pick<Pending, 'connections' | 'events' | 'testReadings'>, clock: StageClock) => void): void {
		work(this.#pending, this.clock());
		this.#schedule(this.#pending);
	}

	#schedule(pending: Pending): void {
		this.counts.waiting = pending.readings.length + (this.#writing ? this.#writingCount : 0);
		if (pending.readings.length >= FLUSH_READINGS && !this.#writing) {
			clearTimeout(this.#timer);
			this.#timer = undefined;
			void this.#flush();
			return;
		}
		if (pending.readings.length >= MOST_WAITING / 2) this.#outlet.hurry();
		this.#timer ??= setTimeout(
			() => {
				this.#timer = undefined;
				void this.#flush();
			},
			this.#isSpooling ? SPOOL_FLUSH_MS : FLUSH_MS,
		);
	}

	get #isSpooling(): boolean {
		return this.spool !== null && this.#outlet.isDown;
	}

	async #flush(): Promise<void> {
		if (this.#writing) return;
		if (this.#late.size > 0) this.#judgeLate(this.#isStopping);
		const pending = this.#pending;
		if (this.#wasDown && !this.#outlet.isDown) this.#confirmedAt = 0;
		this.#wasDown = this.#outlet.isDown;
		const isLatestDue = performance.now() - this.#latestAt >= LATEST_MS;
		const isConfirmDue = performance.now() - this.#confirmedAt >= CONFIRM_MS;
		if (!hasWork(pending) && !(isLatestDue && this.#latest.size > 0)) {
			if (this.#latest.size + this.#late.size > 0) this.#schedule(pending);
			return;
		}
		this.#pending = this.#fresh();
		const batch = this.#batchOf(pending, isLatestDue, isConfirmDue);
		this.#writingCount = batch.readings.length;
		this.#writing = this.#leave(batch, pending);
		await this.#writing;
		this.#writing = null;
		this.#writingCount = 0;
		this.counts.waiting = this.#pending.readings.length;
		this.#rememberAfter(batch, isConfirmDue);
		const next = this.#pending;
		if (hasWork(next) || this.#latest.size + this.#late.size > 0) this.#schedule(next);
	}

	async #leave(batch: WriteBatch, { resolvers, refused }: Pending): Promise<void> {
		const answer = await this.#outlet.write(batch);
		for (const resolve of resolvers) resolve(answer);
		for (const one of refused) one.resolve(one.answer);
	}

	#batchOf(pending: Pending, isLatestDue: boolean, isConfirmDue: boolean): WriteBatch {
		const latest = isLatestDue ? this.#latest : new Set<TagRuntime>();
		if (isLatestDue) {
			this.#latest = new Set();
			this.#latestAt = performance.now();
		}
		let confirmed = new Set<TagRuntime>();
		if (isConfirmDue) {
			confirmed = this.#confirmed;
			this.#confirmed = new Set();
			this.#confirmedAt = performance.now();
		}
		if (this.#isSpooling) {
			// The spool keeps a tag's newest state whole; what only moved on, without a change of an alarm, goes there as often as latest values do.
			for (const tag of confirmed) latest.add(tag);
			confirmed = new Set();
			const changed = new Set(pending.alarmChanges.map((change) => change.tagId));
			if (!isLatestDue)
				for (const tag of pending.judging)
					if (!changed.has(tag.plan.tagId)) {
						pending.judging.delete(tag);
						this.#pending.touchJudging(tag);
					}
		}
		const batch: WriteBatch = {
			readings: pending.readings,
			alarmChanges: pending.alarmChanges,
			connections: pending.connections,
			events: pending.events,
			testReadings: pending.testReadings,
			judgingStates: [...pending.judging].flatMap((tag) => (tag.judging ? [{ tagId: tag.plan.tagId, state: tag.judging }] : [])),
			latest: [...latest].flatMap((tag) => (tag.latest ? [tag.latest] : [])),
			confirmations: [...confirmed].flatMap((tag) =>
				tag.latest ? [{ tagId: tag.plan.tagId, confirmedAt: tag.latest.confirmedAt, verdict: tag.latest.verdict }] : [],
			),
		};
		for (const tag of latest) if (tag.latest?.resets) tag.latest = { ...tag.latest, resets: false };
		return batch;
	}

	/** What tags remember goes into the cache after the commit that holds it: judged once more after a kill is harmless, an alarm forgotten is not. */
	#rememberAfter(batch: WriteBatch, isDue: boolean): void {
		if (this.#outlet.isDown) return;
		if (isDue) {
			this.#remember(this.#unremembered);
			this.#unremembered = new Set();
		} else if (batch.alarmChanges.length > 0) {
			const tags = batch.alarmChanges.flatMap((change) => this.tags.get(change.tagId) ?? []);
			this.#remember(tags);
		}
	}

	#isStopping = false;

	/** Writes what is left, into the spool where the database is away; without one it gives up after `graceMs` and counts what is lost. */
	async close(graceMs = 5_000): Promise<void> {
		const limit = this.#outlet.giveUpSoon(graceMs);
		this.#isStopping = true;
		clearTimeout(this.#timer);
		this.#latestAt = 0;
		this.#confirmedAt = 0;
		while (this.#writing) await this.#writing;
		await this.#flush();
		while (this.#writing) await this.#writing;
		clearTimeout(limit);
		clearTimeout(this.#timer);
		this.#remember(this.#unremembered);
		await this.#outlet.close();
	}
}
