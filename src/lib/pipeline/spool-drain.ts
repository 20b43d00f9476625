// Edge: pipeline. Delivers the spool beside live data: changes of alarms first and in order, then readings, oldest first. May touch: the spool, the writer it is given.
import { log } from '#lib/server/log.ts';
import { isRefusal } from '#lib/pipeline/store/refusal.ts';
import type { Spool } from '#lib/pipeline/store/spool.ts';
import { EMPTY_BATCH, type WriteBatch } from '#lib/pipeline/store/write-batch.ts';

export interface DrainOptions {
	/** Rejects when the database is away. */
	write(batch: WriteBatch): Promise<void>;
	/** Writes what can be written of a batch that the database refuses by its rules. */
	refused(batch: WriteBatch, error: Error): Promise<void>;
	isOver(): boolean;
	isLiveWriting(): boolean;
	/** Live readings wait for the writer. */
	isBehind(): boolean;
}

/** Readings in one transaction: few enough that live data never waits long for the site's row, enough that a transaction pays. */
const READINGS_A_TURN = 4_000;
const CHANGES_A_TURN = 200;
/** Pauses after a turn, as multiples of what it took: with live data behind, the spool gets a tenth of the time. */
const PAUSE_BEHIND = 9;
const PAUSE_EASY = 0.5;
/** The file would not let go what was delivered: delivering it again at once would only repeat that. */
const PAUSE_FAILED_MS = 5_000;
const LOOK_MS = 5;
const MOST_LOOKS = 200;

const pause = (ms: number) => new Promise((resolve) => setTimeout(resolve, ms));

/** Delivers until nothing is left or it is over. Rejects when the database goes away again; what was not delivered stays. */
export async function drainSpool(spool: Spool, options: DrainOptions): Promise<void> {
	const before = spool.state;
	const isWorth = before.readings + before.changes > 0;
	if (isWorth) log.info({ readings: before.readings, changes: before.changes }, 'the spool is being delivered');
	while (!options.isOver()) {
		if (spool.hasChanges) {
			if (!(await deliverChanges(spool, options))) await pause(PAUSE_FAILED_MS);
		} else if (spool.hasReadings) {
			await untilLiveRests(options);
			const started = performance.now();
			const isStruck = await deliverReadings(spool, options);
			const took = performance.now() - started;
			await pause(isStruck ? took * (options.isBehind() ? PAUSE_BEHIND : PAUSE_EASY) : PAUSE_FAILED_MS);
		} else {
			if (isWorth) log.info('the spool is empty');
			return;
		}
	}
}

/** Live data goes first: waits for a gap between its writes, though not for ever. */
async function untilLiveRests({ isLiveWriting, isOver }: DrainOptions): Promise<void> {
	for (let looks = 0; isLiveWriting() && !isOver() && looks < MOST_LOOKS; looks += 1) await pause(LOOK_MS);
}

async function deliverChanges(spool: Spool, options: DrainOptions): Promise<boolean> {
	const found = spool.firstChanges(CHANGES_A_TURN);
	const last = found.at(-1);
	if (!last) return false;
	// In order within the two kinds; an alarm of a tag and one of a connection never concern each other.
	await deliver(options, {
		...EMPTY_BATCH,
		alarmChanges: found.flatMap(({ change }) => (change.kind === 'alarm' ? [change.change] : [])),
		connections: found.flatMap(({ change }) => (change.kind === 'connection' ? [change.change] : [])),
	});
	return spool.changesDelivered(last.seq);
}

async function deliverReadings(spool: Spool, options: DrainOptions): Promise<boolean> {
	const { rows, readings, testReadings } = spool.oldest(READINGS_A_TURN);
	if (rows.length === 0) return false;
	await deliver(options, { ...EMPTY_BATCH, readings, testReadings });
	return spool.strike(rows);
}

async function deliver(options: DrainOptions, batch: WriteBatch): Promise<void> {
	try {
		await options.write(batch);
	} catch (error) {
		if (!isRefusal(error)) throw error;
		await options.refused(batch, error as Error);
	}
}
