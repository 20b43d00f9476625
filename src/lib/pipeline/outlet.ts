// Edge: pipeline. Where batches leave: PostgreSQL while it is there, the spool while it is away, memory where neither takes them.
import { log } from '#lib/server/log.ts';
import type { EmitAnswer } from '#lib/pipeline/sources/source.ts';
import type { CopyWriter } from '#lib/pipeline/store/copy-writer.ts';
import { isRefusal } from '#lib/pipeline/store/refusal.ts';
import type { Spool } from '#lib/pipeline/store/spool.ts';
import { EMPTY_BATCH, type WriteBatch, type WriteResult } from '#lib/pipeline/store/write-batch.ts';
import type { LossLedger, LossReason } from './loss-ledger.ts';
import { drainSpool } from './spool-drain.ts';

export interface OutletCounts {
	/** Readings committed since the start. */
	stored: number;
	duplicates: number;
	deadLetters: number;
	/** Readings that went into the spool since the start. */
	spooled: number;
	/** Samples and readings let go since the start. */
	dropped: number;
}

export interface OutletOptions {
	writer: CopyWriter;
	counts: OutletCounts;
	losses: LossLedger;
	/** Without one, what cannot be written waits in memory. */
	spool: Spool | null;
	/** Source of a tag, empty when it is not known any more. */
	sourceOf(tagId: number): string;
}

const RETRY_MS = 500;
/** A write that takes longer is given up: the network may be cut without a word, and what follows must not pile up in memory. */
const STUCK_MS = 10_000;
/** What is delivered from the spool may take longer: nothing waits behind it. */
const DELIVERY_MS = 60_000;
/** Rounds that bring the newest state of tags over before live data goes first all the same. */
const TAG_ROUNDS = 20;
const TAGS_A_WRITE = 2_000;
const SAY_AGAIN_MS = 60_000;

/** Rejects when `work` has not ended in time. */
async function within(ms: number, work: Promise<void>): Promise<void> {
	let timer: NodeJS.Timeout | undefined;
	const late = new Promise<never>((_, reject) => {
		timer = setTimeout(() => reject(new Error(`no answer within ${ms} ms`)), ms);
	});
	await Promise.race([work, late]).finally(() => clearTimeout(timer));
}

export class Outlet {
	readonly #options: OutletOptions;
	#isDown = false;
	#isClosing = false;
	#isLiveWriting = false;
	#stuck: AbortController | null = null;
	#probe: NodeJS.Timeout | undefined;
	#returning: Promise<boolean> | null = null;
	#draining: Promise<void> | null = null;
	#saidAt = -Infinity;
	/** Runs when the database answers again, before anything is written: leases are looked at first. */
	onReturn: () => Promise<void> = () => Promise.resolve();
	/** True while live readings wait for the writer: the spool keeps further back then. */
	isBehind: () => boolean = () => false;

	constructor(options: OutletOptions) {
		this.#options = options;
	}

	/** True while the database does not take what is written. */
	get isDown(): boolean {
		return this.#isDown;
	}

	/** True when nothing more can be taken on. */
	get isFull(): boolean {
		return this.#isDown && this.#options.spool !== null && this.#options.spool.isFull;
	}

	/** The first look whether the database is there; with what an earlier run left in the spool, its tags' states go over before anybody reads them. */
	async begin(): Promise<boolean> {
		this.#isDown = true;
		const isThere = await this.#comeBack();
		if (!isThere) this.#probeSoon();
		return isThere;
	}

	/** Writes or keeps a batch, whatever it takes; the answer says which. */
	async write(batch: WriteBatch): Promise<EmitAnswer> {
		const { spool, sourceOf } = this.#options;
		let rest = batch;
		if (spool?.hasChanges && !this.#isDown && batch.alarmChanges.length + batch.connections.length > 0) {
			// Alarms change in order: behind those that still wait.
			const { alarmChanges, connections } = batch;
			if (spool.append({ ...EMPTY_BATCH, alarmChanges, connections }, sourceOf))
				rest = { ...batch, alarmChanges: [], connections: [] };
		}
		for (;;) {
			if (this.#isDown && spool?.append(rest, sourceOf)) {
				this.#options.counts.spooled += rest.readings.length;
				return 'spooled';
			}
			if (!this.#isDown || !spool) {
				try {
					await this.#writeLive(rest);
					this.#isBack();
					return 'stored';
				} catch (error) {
					if (isRefusal(error)) {
						// The database is there and will refuse this batch again: what of it can be written is.
						await this.#writeParts(rest, error as Error);
						return 'stored';
					}
					this.#isAway(error as Error);
					if (spool) continue;
				}
			}
			if (this.#isClosing) {
				this.lose(rest, 'stopped');
				return { dropped: rest.readings.length, reason: 'stopped while the database was away' };
			}
			await new Promise((resolve) => setTimeout(resolve, RETRY_MS));
		}
	}

	/** Too much waits behind the write that is under way: it is given up, so that the rest can go into the spool. */
	hurry(): void {
		if (this.#options.spool) this.#stuck?.abort();
	}

	/** Counts readings of a batch as lost, by their sources. */
	lose(batch: Pick<WriteBatch, 'readings'>, reason: LossReason): void {
		const { losses, counts, sourceOf } = this.#options;
		counts.dropped += batch.readings.length;
		for (const reading of batch.readings) losses.add(sourceOf(reading.tagId), reason, 1, reading.receivedAt);
	}

	/** Adds a result to the counts. */
	count(result: WriteResult): void {
		const { counts } = this.#options;
		counts.stored += result.stored;
		counts.duplicates += result.duplicates;
		counts.deadLetters += result.deadLetters;
	}

	async #writeLive(batch: WriteBatch): Promise<void> {
		const stuck = new AbortController();
		const timer = setTimeout(() => stuck.abort(), STUCK_MS);
		this.#stuck = stuck;
		this.#isLiveWriting = true;
		try {
			this.count(await this.#options.writer.write(batch, stuck.signal));
		} finally {
			clearTimeout(timer);
			this.#stuck = null;
			this.#isLiveWriting = false;
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
			...batch.connections.map((change) => ({ connections: [change] })),
		];
		for (const part of parts) {
			try {
				this.count(await this.#options.writer.write({ ...EMPTY_BATCH, ...part }));
			} catch (error) {
				this.#options.counts.deadLetters += part.readings?.length ?? 1;
				this.#options.counts.dropped += part.readings?.length ?? 0;
				log.error({ error: (error as Error).message, part: Object.keys(part)[0] }, 'part of a batch was refused and is given up');
			}
		}
	}

	#isAway(error: Error): void {
		const { spool } = this.#options;
		if (!this.#isDown)
			log.error({ error: error.message }, `readings cannot be written; they wait ${spool ? 'in the spool' : 'in memory'}`);
		this.#isDown = true;
		this.#saidAt = performance.now();
		if (spool) this.#probeSoon();
	}

	#isBack(): void {
		if (this.#isDown && this.#saidAt > -Infinity) log.info('the database takes what is written again');
		this.#isDown = false;
	}

	#probeSoon(): void {
		if (this.#isClosing || this.#probe) return;
		this.#probe = setTimeout(() => {
			this.#probe = undefined;
			void this.#comeBack().then((isThere) => !isThere && this.#probeSoon());
		}, RETRY_MS);
	}

	#comeBack(): Promise<boolean> {
		this.#returning ??= this.#tryReturn().finally(() => (this.#returning = null));
		return this.#returning;
	}

	/** Looks whether the database is there; if so tags' newest states go over, then live data goes first and the spool drains beside it. */
	async #tryReturn(): Promise<boolean> {
		const { spool, writer } = this.#options;
		try {
			await writer.write(EMPTY_BATCH, AbortSignal.timeout(STUCK_MS));
			await within(STUCK_MS, this.onReturn());
			for (let round = 0; spool?.hasTags && round < TAG_ROUNDS; round += 1) await this.#deliverTags(spool);
		} catch (error) {
			this.#sayWaiting(error as Error);
			return false;
		}
		this.#isBack();
		this.#drain();
		return true;
	}

	async #deliverTags(spool: Spool): Promise<void> {
		const { stamp, tags } = spool.tags();
		for (let from = 0; from < tags.length; from += TAGS_A_WRITE) {
			const some = tags.slice(from, from + TAGS_A_WRITE);
			const batch = {
				...EMPTY_BATCH,
				latest: some.flatMap((tag) => tag.latest ?? []),
				judgingStates: some.flatMap(({ tagId, judging }) => (judging ? [{ tagId, state: judging }] : [])),
			};
			try {
				await this.#options.writer.write(batch, AbortSignal.timeout(DELIVERY_MS));
			} catch (error) {
				if (!isRefusal(error)) throw error;
				await this.#writeParts(batch, error as Error);
			}
		}
		if (!spool.tagsDelivered(stamp)) throw new Error('the spool does not let go what was delivered');
	}

	#sayWaiting(error: Error): void {
		if (performance.now() - this.#saidAt < SAY_AGAIN_MS) return;
		this.#saidAt = performance.now();
		const { spool } = this.#options;
		log.warn({ error: error.message, ...spool?.state }, 'the database is still away; readings wait in the spool');
	}

	#drain(): void {
		const { spool, writer } = this.#options;
		if (!spool || this.#draining) return;
		this.#draining = drainSpool(spool, {
			write: async (batch) => this.count(await writer.write(batch, AbortSignal.timeout(DELIVERY_MS))),
			refused: (batch, error) => this.#writeParts(batch, error),
			isOver: () => this.#isClosing || this.#isDown,
			isLiveWriting: () => this.#isLiveWriting,
			isBehind: () => this.isBehind(),
		})
			.catch((error: Error) => this.#isAway(error))
			.finally(() => (this.#draining = null));
	}

	/** From now on nothing waits for the database any more. */
	giveUpSoon(graceMs: number): NodeJS.Timeout {
		return setTimeout(() => (this.#isClosing = true), graceMs);
	}

	/** Ends probing and draining; what is left in the spool stays there for the next run. */
	async close(): Promise<void> {
		this.#isClosing = true;
		clearTimeout(this.#probe);
		this.#probe = undefined;
		await this.#returning;
		await this.#draining;
		this.#options.spool?.close();
	}
}
