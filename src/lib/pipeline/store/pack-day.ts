// Edge: store. May touch: reading tables, packing state. Packs the oldest day that is due; every commit leaves a state that the next run goes on from.
import { setTimeout as sleep } from 'node:timers/promises';
import type { Pool } from '#lib/server/db/pool.ts';
import { inTransaction } from '#lib/server/db/transaction.ts';
import { ARRAYS, packStatement } from './pack-sql.ts';

const DAY_MS = 86_400_000;
/** A chunk takes about so long; then packing rests nine times as long, so that it costs a tenth of one core and disk at most. */
const CHUNK_MS = 250;
const REST = 9;
const MOST_TAGS = 500;
/** Of a block beside its arrays: header, fixed columns, entry of the index. */
const BLOCK_BYTES = 150;

export interface PackOptions {
	signal: AbortSignal;
	/** Rest after each chunk as a multiple of its time; 0 packs without a rest. */
	rest?: number;
}

/** The oldest day with rows that ends at or before `edge` (milliseconds), as `2026-11-24`; null where none is due. */
export async function findDueDay(pool: Pool, edge: number): Promise<string | null> {
	const found = await pool.query<{ day: string }>(
		`WITH children AS MATERIALIZED (SELECT c.relname AS name FROM pg_inherits i JOIN pg_class c ON c.oid = i.inhrelid WHERE i.inhparent = 'readings'::regclass),
			dated AS MATERIALIZED (SELECT to_date(right(name, 8), 'YYYYMMDD') AS day FROM children WHERE name ~ '^readings_[0-9]{8}$')
		 SELECT to_char(day, 'YYYY-MM-DD') AS day FROM dated, packing_state
		 WHERE day::timestamp AT TIME ZONE 'UTC' >= packed_until AND (day + 1)::timestamp AT TIME ZONE 'UTC' <= $1 ORDER BY day LIMIT 1`,
		[new Date(edge).toISOString()],
	);
	return found.rows[0]?.day ?? null;
}

/** Packs one day: closes it to rows, writes blocks in chunks that nobody sees yet, then moves `packed_until` in one commit. Answers the readings packed; null when it was stopped. */
export async function packDay(pool: Pool, day: string, { signal, rest = REST }: PackOptions): Promise<number | null> {
	const table = `readings_${day.replaceAll('-', '')}`;
	const begin = Date.parse(`${day}T00:00:00Z`);
	const until = new Date(begin + DAY_MS).toISOString();
	const done = await closeDay(pool, until);
	// From one tag to the next by the index, not through all rows.
	const work = await pool.query<{ tag_id: number }>(
		`WITH RECURSIVE steps AS (
			SELECT (SELECT min(tag_id) FROM ${table} WHERE tag_id > $1) AS tag_id
			UNION ALL SELECT (SELECT min(tag_id) FROM ${table} r WHERE r.tag_id > s.tag_id) FROM steps s WHERE s.tag_id IS NOT NULL)
		 SELECT tag_id FROM steps WHERE tag_id IS NOT NULL ORDER BY tag_id`,
		[done],
	);
	const tags = work.rows.map((row) => row.tag_id);
	const groups = await pool.query<{ retention_group: number }>(
		'SELECT DISTINCT retention_group FROM tag_retention UNION SELECT 0 ORDER BY 1',
	);
	for (const row of groups.rows)
		await pool.query('SELECT ensure_block_partition($1, $2)', [row.retention_group, new Date(begin).toISOString()]);
	let size = 4;
	for (let place = 0; place < tags.length;) {
		if (signal.aborted) return null;
		const some = tags.slice(place, place + size);
		const started = performance.now();
		await packChunk(pool, table, some, started);
		const tookMs = performance.now() - started;
		place += some.length;
		size = Math.max(1, Math.min(MOST_TAGS, Math.round((size * CHUNK_MS) / Math.max(tookMs, CHUNK_MS / 4))));
		if (rest > 0) await sleep(tookMs * rest, undefined, { signal }).catch(() => undefined);
	}
	if (signal.aborted) return null;
	return swapDay(pool, day, until);
}

/** No row is written into the day any more: writers that looked before are waited for, later ones see it. Answers the last tag whose blocks are there already. */
async function closeDay(pool: Pool, until: string): Promise<number> {
	return inTransaction(pool, async (_, client) => {
		const state = await client.query<{ done_tag: number; is_closed: boolean }>(
			'SELECT done_tag, closed_until >= $1 AS is_closed FROM packing_state FOR UPDATE',
			[until],
		);
		// A run that was cut off goes on from where it was.
		if (state.rows[0]?.is_closed) return state.rows[0].done_tag;
		await client.query('UPDATE packing_state SET closed_until = $1, done_tag = 0, work_ms = 0', [until]);
		return 0;
	});
}

async function packChunk(pool: Pool, table: string, tags: readonly number[], started: number): Promise<void> {
	await inTransaction(pool, async (_, client) => {
		await client.query('SET LOCAL statement_timeout = 0');
		const source = `(SELECT * FROM ${table} WHERE tag_id IN (${tags.map(Number).join(',')}))`;
		const blocks = await client.query<{ n: number }>(packStatement(source));
		const packed = blocks.rows.reduce((sum, row) => sum + row.n, 0);
		const rows = (await client.query<{ n: number }>(`SELECT count(*) AS n FROM ${source} s`)).rows[0]?.n;
		if (rows !== packed) throw new Error(`${table}: ${rows} rows became ${packed} packed readings; the rows stay`);
		await client.query('UPDATE packing_state SET done_tag = $1, work_ms = work_ms + $2', [
			tags.at(-1),
			Math.round(performance.now() - started),
		]);
	});
}

/** Makes the blocks count instead of the rows. */
async function swapDay(pool: Pool, day: string, until: string): Promise<number> {
	return inTransaction(pool, async (_, client) => {
		await client.query('SELECT FROM packing_state FOR UPDATE');
		const sizes = ARRAYS.map((name) => `coalesce(pg_column_size(${name}), 0)`).join(' + ');
		const made = await client.query<{ readings: number }>(
			`INSERT INTO packed_days (day, readings, blocks, bytes, work_ms, packed_at)
			 SELECT $1, coalesce(sum(n), 0), count(*), coalesce(sum(${BLOCK_BYTES} + ${sizes}), 0), (SELECT work_ms FROM packing_state), clock_timestamp()
			 FROM reading_blocks WHERE hour >= $2::timestamptz - interval '1 day' AND hour < $2
			 ON CONFLICT (day) DO UPDATE SET packed_at = excluded.packed_at RETURNING readings`,
			[day, until],
		);
		await client.query('UPDATE packing_state SET packed_until = $1, done_tag = 0, work_ms = 0', [until]);
		return made.rows[0]?.readings ?? 0;
	});
}
