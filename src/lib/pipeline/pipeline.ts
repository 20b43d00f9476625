// Edge: pipeline. Lists the stages in order: decode → normalize → judge → deadband → write; one bounded queue; sheds load visibly, never silently.
import type { TagPlan } from '#lib/domain/tag-map/tag-plan.ts';
import { RETENTION } from '#lib/domain/retention.ts';
import { log } from '#lib/server/log.ts';
import type { EmitAnswer, Sample } from '#lib/pipeline/sources/source.ts';
import type { CopyWriter } from '#lib/pipeline/store/copy-writer.ts';
import { rawEdgeOf } from '#lib/pipeline/store/partitions.ts';
import {
	EMPTY_BATCH,
	type FeedEvent,
	type StoredReading,
	type TagAlarmChange,
	type WriteBatch,
} from '#lib/pipeline/store/write-batch.ts';
import { TagRuntime, type Sink, type StageClock, type TagMemory } from './tag-runtime.ts';

/** A commit at least this often, and at least every so many readings. */
const FLUSH_MS = 100;
const FLUSH_READINGS = 10_000;
/** Most readings that wait for the database in memory; what comes beyond is dropped, counted and shown. */
const MOST_WAITING = 200_000;
/** Latest values are written at most once a second a tag, confirmations more rarely: they change only an age. */
const LATEST_MS = 1_000;
const CONFIRM_MS = 5_000;
const RETRY_MS = 500;
/** Late readings of a tag are one stretch until none has come for this long. */
const LATE_QUIET_MS = 10_000;

export interface PipelineCounts {
	/** Readings committed since the start. */
	stored: number;
	duplicates: number;
	deadLetters: number;
	dropped: number;
	waiting: number;
	/** Samples taken since the start. */
	taken: number;
}

interface Pending extends Sink {
	readings: StoredReading[];
	alarmChanges: TagAlarmChange[];
	events: FeedEvent[];
	testReadings: { siteId: number; tagId: number; at: number; value: number; quality: number }[];
	judging: Set<TagRuntime>;
	resolvers: ((answer: EmitAnswer) => void)[];
}

function hasWork(pending: Pending): boolean {
	return (
		pending.readings.length +
			pending.alarmChanges.length +
			pending.events.length +
			pending.testReadings.length +
			pending.judging.size +
			pending.resolvers.length >
		0
	);
}

/** True for what the database refuses by its rules (data, constraints, names, raised by us); false where it is away or busy, and trying again helps. */
function isRefusal(error: unknown): boolean {
	const code = error instanceof Error && 'code' in error ? String(error.code) : '';
	return /^(22|23|42|P0)/.test(code);
}

/** The middle of a reading's journey, for all sources of this process. */
export class Pipeline {
	readonly counts: PipelineCounts = { stored: 0, duplicates: 0, deadLetters: 0, dropped: 0, waiting: 0, taken: 0 };
	readonly tags = new Map<number, TagRuntime>();
	/** Days that raw readings are kept, the longest of all tags; a source's time before that is not to be trusted. */
	rawDays = RETENTION.rawDays;
	readonly #writer: CopyWriter;
	readonly #now: () => number;
	#pending: Pending;
	#latest = new Set<TagRuntime>();
	#confirmed = new Set<TagRuntime>();
	#late = new Set<TagRuntime>();
	#latestAt = 0;
	#confirmedAt = 0;
	#timer: NodeJS.Timeout | undefined;
	#writing: Promise<void> | null = null;
	#isDown = false;

	constructor(writer: CopyWriter, now: () => number) {
		this.#writer = writer;
		this.#now = now;
		this.#pending = this.#fresh();
	}

	#fresh(): Pending {
		const judging = new Set<TagRuntime>();
		return {
			readings: [],
			alarmChanges: [],
			events: [],
			testReadings: [],
			judging,
			resolvers: [],
			touchJudging: (tag) => judging.add(tag),
			touchLatest: (tag) => this.#latest.add(tag),
			touchConfirmed: (tag) => this.#confirmed.add(tag),
			touchLate: (tag) => this.#late.add(tag),
		};
	}

	/** True while the database does not take what is written. */
	get isDown(): boolean {
		return this.#isDown;
	}

	clock(): StageClock {
		const now = this.#now();
		return { now, mono: performance.now(), rawEdge: rawEdgeOf(now, this.rawDays) };
	}

	/** Takes a tag up, or its new plan; a tag that was running keeps what it remembers. */
	setTag(plan: TagPlan, memory: TagMemory): TagRuntime {
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
	 * Takes samples through the stages. The answer comes with the commit that holds them, so that a source may acknowledge;
	 * when too much waits already, they are dropped and the answer says so.
	 */
	accept(samples: readonly Sample[], onSample?: (isUsable: boolean, isDuplicate: boolean) => void): Promise<EmitAnswer> {
		this.counts.taken += samples.length;
		if (this.counts.waiting + samples.length > MOST_WAITING) {
			this.counts.dropped += samples.length;
			return Promise.resolve({ dropped: samples.length, reason: 'the database has been away too long and the queue is full' });
		}
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

	/** Work that is not a source's sample: going stale, test values, events. */
	add(work: (pending: Sink & { events: FeedEvent[]; testReadings: Pending['testReadings'] }, clock: StageClock) => void): void {
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
		this.#timer ??= setTimeout(() => {
			this.#timer = undefined;
			void this.#flush();
		}, FLUSH_MS);
	}

	#writingCount = 0;

	async #flush(): Promise<void> {
		if (this.#writing) return;
		if (this.#late.size > 0) this.#judgeLate(this.#isStopping);
		const pending = this.#pending;
		const isLatestDue = performance.now() - this.#latestAt >= LATEST_MS;
		const isConfirmDue = performance.now() - this.#confirmedAt >= CONFIRM_MS;
		if (!hasWork(pending) && !(isLatestDue && this.#latest.size > 0)) {
			if (this.#latest.size + this.#late.size > 0) this.#schedule(pending);
			return;
		}
		this.#pending = this.#fresh();
		const latest = isLatestDue ? this.#latest : new Set<TagRuntime>();
		if (isLatestDue) {
			this.#latest = new Set();
			this.#latestAt = performance.now();
		}
		const confirmed = isConfirmDue ? this.#confirmed : new Set<TagRuntime>();
		if (isConfirmDue) {
			this.#confirmed = new Set();
			this.#confirmedAt = performance.now();
		}
		const batch: WriteBatch = {
			readings: pending.readings,
			alarmChanges: pending.alarmChanges,
			events: pending.events,
			testReadings: pending.testReadings,
			judgingStates: [...pending.judging].flatMap((tag) => (tag.judging ? [{ tagId: tag.plan.tagId, state: tag.judging }] : [])),
			latest: [...latest].flatMap((tag) => (tag.latest ? [tag.latest] : [])),
			confirmations: [...confirmed].flatMap((tag) =>
				tag.latest ? [{ tagId: tag.plan.tagId, confirmedAt: tag.latest.confirmedAt, verdict: tag.latest.verdict }] : [],
			),
		};
		for (const tag of latest) if (tag.latest?.resets) tag.latest = { ...tag.latest, resets: false };
		this.#writingCount = batch.readings.length;
		this.#writing = this.#write(batch, pending.resolvers);
		await this.#writing;
		this.#writing = null;
		this.#writingCount = 0;
		this.counts.waiting = this.#pending.readings.length;
		const next = this.#pending;
		if (hasWork(next) || this.#latest.size + this.#late.size > 0) this.#schedule(next);
	}

	/** Writes until it is written: what was taken is not let go because the database is away. */
	async #write(batch: WriteBatch, resolvers: Pending['resolvers']): Promise<void> {
		for (;;) {
			try {
				const result = await this.#writer.write(batch);
				this.counts.stored += result.stored;
				this.counts.duplicates += result.duplicates;
				this.counts.deadLetters += result.deadLetters;
				if (this.#isDown) log.info('the database takes what is written again');
				this.#isDown = false;
				for (const resolve of resolvers) resolve('stored');
				return;
			} catch (error) {
				if (isRefusal(error)) {
					// The database is there and will refuse this batch again: what of it can be written is.
					await this.#writeParts(batch, error as Error);
					for (const resolve of resolvers) resolve('stored');
					return;
				}
				if (!this.#isDown) log.error({ error: (error as Error).message }, 'readings cannot be written; they wait in memory');
				this.#isDown = true;
				if (this.#isClosing) {
					this.counts.dropped += batch.readings.length;
					for (const resolve of resolvers)
						resolve({ dropped: batch.readings.length, reason: 'stopped while the database was away' });
					return;
				}
				await new Promise((resolve) => setTimeout(resolve, RETRY_MS));
			}
		}
	}

	/** Writes a refused batch part by part, so that one part that breaks a rule holds up nothing; what is refused still is counted and logged. */
	async #writeParts(batch: WriteBatch, refusal: Error): Promise<void> {
		log.error({ error: refusal.message }, 'a batch was refused and is written in parts');
		const parts: Partial<WriteBatch>[] = [
			{ readings: batch.readings },
			{ latest: batch.latest },
			{ confirmations: batch.confirmations },
			{ judgingStates: batch.judgingStates },
			{ testReadings: batch.testReadings },
			{ events: batch.events },
			...batch.alarmChanges.map((change) => ({ alarmChanges: [change] })),
		];
		for (const part of parts) {
			try {
				const result = await this.#writer.write({ ...EMPTY_BATCH, ...part });
				this.counts.stored += result.stored;
				this.counts.duplicates += result.duplicates;
				this.counts.deadLetters += result.deadLetters;
			} catch (error) {
				this.counts.deadLetters += part.readings?.length ?? 1;
				this.counts.dropped += part.readings?.length ?? 0;
				log.error({ error: (error as Error).message, part: Object.keys(part)[0] }, 'part of a batch was refused and is given up');
			}
		}
	}

	#isClosing = false;
	#isStopping = false;

	/** Writes what is left; with the database away it gives up after `graceMs` and counts what is lost. */
	async close(graceMs = 5_000): Promise<void> {
		const limit = setTimeout(() => (this.#isClosing = true), graceMs);
		this.#isStopping = true;
		clearTimeout(this.#timer);
		this.#latestAt = 0;
		this.#confirmedAt = 0;
		while (this.#writing) await this.#writing;
		await this.#flush();
		while (this.#writing) await this.#writing;
		clearTimeout(limit);
		clearTimeout(this.#timer);
	}
}
