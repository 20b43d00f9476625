// Edge: collector. Packing in the background, by one collector at a time. May touch: packing, retention, packing state.
import { findDueDay, packDay } from '#lib/pipeline/store/pack-day.ts';
import { packLate, regroupBlocks } from '#lib/pipeline/store/pack-late.ts';
import { readRetention } from '#lib/pipeline/store/retention.ts';
import type { Pool } from '#lib/server/db/pool.ts';
import { log } from '#lib/server/log.ts';

/** Any number that nothing else in the database uses. */
const LOCK = 7_261_405;
const DAY_MS = 86_400_000;
/** A backlog comes in many batches; its hours are not packed anew after each. */
const LATE_EVERY_MS = 900_000;

export interface Packing {
	/** Does what is due; at once when another collector is at it or nothing is. */
	run(): Promise<void>;
	stop(): void;
}

/** Packs days older than the rows' days, one after the other, then late rows; drops packed rows once nobody can read them. `rest` as for `packDay`. */
export function createPacking(pool: Pool, now: () => number, rest?: number): Packing {
	const stop = new AbortController();
	const options = { signal: stop.signal, ...(rest === undefined ? {} : { rest }) };
	let lateAt = -Infinity;
	const work = async () => {
		await dropPacked(pool);
		const { rowDays } = await readRetention(pool);
		await regroupBlocks(pool, options);
		for (;;) {
			const day = stop.signal.aborted ? null : await findDueDay(pool, now() - rowDays * DAY_MS);
			if (!day) break;
			const started = performance.now();
			const readings = await packDay(pool, day, options);
			if (readings === null) return;
			log.info({ day, readings, tookMs: Math.round(performance.now() - started) }, 'a day of readings was packed');
			await dropPacked(pool);
		}
		if (performance.now() - lateAt < LATE_EVERY_MS) return;
		await packLate(pool, options);
		lateAt = performance.now();
	};
	return {
		async run() {
			if (stop.signal.aborted) return;
			// A lock belongs to one connection, so one is kept for it.
			const client = await pool.connect();
			try {
				const lock = await client.query<{ got: boolean }>('SELECT pg_try_advisory_lock($1) AS got', [LOCK]);
				if (!lock.rows[0]?.got) return;
				await pool.query('UPDATE packing_state SET started_at = now()');
				await work();
				await pool.query('UPDATE packing_state SET finished_at = now(), error = NULL');
			} catch (error) {
				await pool
					.query('UPDATE packing_state SET finished_at = now(), error = $1', [(error as Error).message])
					.catch(() => undefined);
				throw error;
			} finally {
				// Ending the connection gives the lock back whatever went wrong.
				client.release(true);
			}
		},
		stop: () => stop.abort(),
	};
}

const LOCK_NOT_AVAILABLE = '55P03';

/** Drops the rows of packed days. A reader that holds them longer than the wait for the lock is not in the way of more packing: the next run drops them. */
async function dropPacked(pool: Pool): Promise<void> {
	try {
		await pool.query('SELECT drop_packed_days()');
	} catch (error) {
		if (!(error instanceof Error && 'code' in error && error.code === LOCK_NOT_AVAILABLE)) throw error;
	}
}
