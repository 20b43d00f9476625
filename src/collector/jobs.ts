// Edge: collector. Housekeeping that one collector at a time does. May touch: partitions, retention, log tables.
import { dropExpired, ensurePartitionsAhead } from '#lib/pipeline/store/partitions.ts';
import type { Pool } from '#lib/server/db/pool.ts';
import { log } from '#lib/server/log.ts';

export interface Jobs {
	run(): Promise<void>;
}

const HOUR_MS = 3_600_000;
/** Any number that nothing else in the database uses. */
const LOCK = 7_261_404;

/** Partitions ahead, retention and old log rows: hourly, by whoever gets the lock; at the first call at once. */
export function createPipelineJobs(pool: Pool, now: () => number): Jobs {
	let doneAt = -Infinity;
	return {
		async run() {
			if (performance.now() - doneAt < HOUR_MS) return;
			await ensurePartitionsAhead(pool, now());
			// A lock belongs to one connection, so one is kept for it.
			const client = await pool.connect();
			try {
				const lock = await client.query<{ got: boolean }>('SELECT pg_try_advisory_lock($1) AS got', [LOCK]);
				if (lock.rows[0]?.got) {
					const dropped = await dropExpired(pool, now());
					if (dropped > 0) log.info({ dropped }, 'partitions past their retention were dropped');
					await pool.query("DELETE FROM source_events WHERE at < now() - interval '30 days'");
					await pool.query("DELETE FROM source_requests WHERE requested_at < now() - interval '1 day'");
					await pool.query("DELETE FROM source_minutes WHERE minute < now() - interval '90 days'");
				}
				doneAt = performance.now();
			} finally {
				// Ending the connection gives the lock back whatever went wrong.
				client.release(true);
			}
		},
	};
}
