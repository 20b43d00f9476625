// Edge: collector. May touch: lease and collector tables. Only PostgreSQL's clock judges a lease.
import type { Pool } from '#lib/server/db/pool.ts';

/** Term of a lease; renewed every RENEW_MS, so three renewals may fail before anybody else takes over. */
export const TERM_S = 12;
export const RENEW_MS = 3_000;
/** A collector without a heartbeat for this long is taken for dead by the pages; written every 2 s. */
export const HEARTBEAT_MS = 2_000;

export interface Owner {
	/** This run of this process. */
	id: string;
	/** The data folder's own collector: after a kill it takes its own leases over at once. */
	instance: string;
}

/** Registers this run. */
export async function registerCollector(pool: Pool, owner: Owner, host: string, pid: number): Promise<void> {
	await pool.query("DELETE FROM collectors WHERE instance = $1 OR heartbeat_at < now() - interval '1 day'", [owner.instance]);
	await pool.query('INSERT INTO collectors (id, instance, host, pid) VALUES ($1, $2, $3, $4)', [
		owner.id,
		owner.instance,
		host,
		pid,
	]);
}

/** Writes the heartbeat with what the pulse line and the metrics show. */
export async function beat(pool: Pool, owner: Owner, stats: Record<string, number>): Promise<void> {
	await pool.query('UPDATE collectors SET heartbeat_at = clock_timestamp(), stats = $2 WHERE id = $1', [
		owner.id,
		JSON.stringify(stats),
	]);
}

/**
 * Renews what is held and takes what is free: leases that ran out, were given back, or belonged to an earlier run of this instance.
 * Answers the sources held now; one that was held and is not in the answer must stop at once.
 */
export async function renewLeases(pool: Pool, owner: Owner): Promise<Set<string>> {
	const held = await pool.query<{ source_id: string }>(
		`WITH enabled AS (SELECT id FROM sources WHERE enabled AND deleted_at IS NULL)
		 INSERT INTO source_leases AS l (source_id, owner, instance, token, until)
		 SELECT id, $1, $2, 1, clock_timestamp() + make_interval(secs => $3) FROM enabled ORDER BY id
		 ON CONFLICT (source_id) DO UPDATE SET owner = $1, instance = $2, until = clock_timestamp() + make_interval(secs => $3),
			token = l.token + CASE WHEN l.owner = $1 THEN 0 ELSE 1 END
		 WHERE l.owner = $1 OR l.owner IS NULL OR l.until < clock_timestamp() OR l.instance = $2
		 RETURNING source_id`,
		[owner.id, owner.instance, TERM_S],
	);
	return new Set(held.rows.map((row) => row.source_id));
}

/** Sources that nobody but this instance has held since it last held them; `mine` where it was not given back. */
export async function readOwnLeases(pool: Pool, owner: Owner): Promise<Map<string, { mine: boolean }>> {
	const found = await pool.query<{ source_id: string; mine: boolean }>(
		'SELECT source_id, owner IS NOT NULL AS mine FROM source_leases WHERE instance = $1',
		[owner.instance],
	);
	return new Map(found.rows.map((row) => [row.source_id, { mine: row.mine }]));
}

/** Gives leases back at a clean stop, so that another collector need not wait for their end. */
export async function releaseLeases(pool: Pool, owner: Owner): Promise<void> {
	await pool.query('UPDATE source_leases SET owner = NULL, until = clock_timestamp() WHERE owner = $1', [owner.id]);
	await pool.query('DELETE FROM collectors WHERE id = $1', [owner.id]);
}
