// Edge: store. May touch: reading tables, packing state. Late rows become part of their hour's block; blocks move to the tables of their tag's retention rule.
import { setTimeout as sleep } from 'node:timers/promises';
import type { Pool } from '#lib/server/db/pool.ts';
import { inTransaction } from '#lib/server/db/transaction.ts';
import type { PackOptions } from './pack-day.ts';
import { packStatement } from './pack-sql.ts';

/** Tags and hours a transaction; a late writer waits no longer than one takes. */
const CHUNK = 50;
const REST = 9;

interface HourKey {
	tag_id: number;
	hour: Date;
	retention_group: number;
}

/** Packs late rows of packed days together with the blocks of their hours. Answers how many hours of tags were packed anew. */
export async function packLate(pool: Pool, { signal, rest = REST }: PackOptions): Promise<number> {
	let packed = 0;
	while (!signal.aborted) {
		const started = performance.now();
		const due = await pool.query<HourKey>(
			`SELECT l.tag_id, l.hour, coalesce(r.retention_group, 0) AS retention_group FROM (
				SELECT DISTINCT tag_id, date_bin(interval '1 hour', at, timestamptz '2000-01-01 00:00:00+00') AS hour
				FROM late_readings WHERE at < (SELECT packed_until FROM packing_state) ORDER BY tag_id, hour LIMIT ${CHUNK}) l
			 LEFT JOIN tag_retention r ON r.tag_id = l.tag_id`,
		);
		if (due.rows.length === 0) break;
		await ensureWeeks(pool, due.rows);
		await mergeHours(pool, due.rows);
		packed += due.rows.length;
		if (rest > 0) await sleep((performance.now() - started) * rest, undefined, { signal }).catch(() => undefined);
	}
	return packed;
}

async function ensureWeeks(pool: Pool, keys: readonly HourKey[]): Promise<void> {
	const weeks = new Map(
		keys.map((key) => [`${key.retention_group} ${Math.floor((key.hour.getTime() / 86_400_000 + 3) / 7)}`, key] as const),
	);
	for (const { retention_group: group, hour } of weeks.values())
		await pool.query('SELECT ensure_block_partition($1, $2)', [group, hour.toISOString()]);
}

async function mergeHours(pool: Pool, keys: readonly HourKey[]): Promise<void> {
	await inTransaction(pool, async (_, client) => {
		// No writer is between its look for an equal reading and its commit while late rows change their place.
		await client.query('SELECT FROM packing_state FOR UPDATE');
		const args = [keys.map((key) => key.tag_id), keys.map((key) => key.hour.toISOString())];
		await client.query('CREATE TEMP TABLE IF NOT EXISTS merged (LIKE readings) ON COMMIT DELETE ROWS');
		await client.query(
			`INSERT INTO merged (tag_id, at, value, quality, received_at, is_hub_time, revision, source_at, reason, raw)
			 SELECT h.* FROM unnest($1::int[], $2::timestamptz[]) AS k (tag_id, hour) CROSS JOIN LATERAL (
				SELECT tag_id, at, value, quality, received_at, is_hub_time, revision, source_at, reason, raw FROM reading_history
				WHERE tag_id = k.tag_id AND hour = k.hour AND at >= k.hour AND at < k.hour + interval '1 hour' OFFSET 0) h`,
			args,
		);
		for (const from of ['reading_blocks b', 'late_readings b'])
			await client.query(
				`DELETE FROM ${from} USING unnest($1::int[], $2::timestamptz[]) AS k (tag_id, hour) WHERE b.tag_id = k.tag_id
				 AND ${from.startsWith('late') ? "b.at >= k.hour AND b.at < k.hour + interval '1 hour'" : 'b.hour = k.hour'}`,
				args,
			);
		await client.query(packStatement('merged'));
	});
}

/** Moves blocks that were packed under another rule than the one that holds for their tag now. Answers how many weeks of tags were moved. */
export async function regroupBlocks(pool: Pool, { signal, rest = REST }: PackOptions): Promise<number> {
	const wrong = async (client: Pick<Pool, 'query'>) =>
		(
			await client.query<HourKey>(
				`SELECT DISTINCT b.tag_id, date_trunc('week', b.hour, 'UTC') AS hour, r.retention_group
				 FROM reading_blocks b JOIN tag_retention r USING (tag_id) WHERE b.retention_group <> r.retention_group`,
			)
		).rows;
	if (!(await pool.query<{ due: boolean }>('SELECT must_regroup AS due FROM packing_state')).rows[0]?.due) return 0;
	let moved = 0;
	for (const key of await wrong(pool)) {
		if (signal.aborted) return moved;
		const started = performance.now();
		await ensureWeeks(pool, [key]);
		await pool.query(
			`UPDATE reading_blocks SET retention_group = $3 WHERE tag_id = $1 AND hour >= $2 AND hour < $2::timestamptz + interval '7 days' AND retention_group <> $3`,
			[key.tag_id, key.hour.toISOString(), key.retention_group],
		);
		moved += 1;
		if (rest > 0) await sleep((performance.now() - started) * rest, undefined, { signal }).catch(() => undefined);
	}
	await inTransaction(pool, async (_, client) => {
		// Whoever changes a rule writes this row in the same transaction, so nothing of it is missed here.
		await client.query('SELECT FROM packing_state FOR UPDATE');
		if ((await wrong(client)).length === 0) await client.query('UPDATE packing_state SET must_regroup = false');
	});
	return moved;
}
