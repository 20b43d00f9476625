// Edge: store. May touch: pool; catalog, packing state and packed days, to read. How large each kind of stored data is.
import type { Pool } from '#lib/server/db/pool.ts';

export type StoreKindName = 'rows' | 'blocks' | 'minute' | 'hour' | 'journal' | 'rest';

export interface StoreSize {
	bytes: Record<StoreKindName, number>;
	/** Oldest day of each kind, milliseconds; null where there is none. */
	since: Record<'rows' | 'blocks' | 'minute' | 'hour' | 'journal', number | null>;
	/** Days that are rows, oldest first: readings as the statistics know them. */
	rowDays: { day: string; readings: number; bytes: number }[];
	/** Days that were packed, newest first. */
	packedDays: { day: string; readings: number; blocks: number; bytes: number; workMs: number; packedAt: number }[];
	lateRows: number;
	packing: {
		packedUntil: number | null;
		/** The day that is being packed; null between two. */
		dayInWork: string | null;
		lastRunAt: number | null;
		error: string | null;
		mustRegroup: boolean;
	};
}

interface TableRow {
	kind: StoreKindName;
	day: string | null;
	bytes: number;
	readings: number;
	is_used: boolean;
}

/** Sizes by kind, with tables, their indexes and what is kept out of line; what is none of ours is the rest. */
export async function findStoreSize(pool: Pool): Promise<StoreSize> {
	const [tables, whole, state, packed] = await Promise.all([
		pool.query<TableRow>(
			`SELECT CASE WHEN relname ~ '^readings_[0-9]{8}$' OR relname = 'late_readings' THEN 'rows'
					WHEN relname ~ '^reading_blocks_g[0-9]+_[0-9]{8}$' THEN 'blocks'
					WHEN relname ~ '^rollups_minute_' THEN 'minute' WHEN relname ~ '^rollups_hour_' THEN 'hour'
					WHEN relname ~ '^feed_journal_' THEN 'journal' ELSE 'rest' END AS kind,
				CASE WHEN relname ~ '_[0-9]{8}$' THEN to_char(to_date(right(relname, 8), 'YYYYMMDD'), 'YYYY-MM-DD') END AS day,
				coalesce(pg_total_relation_size(c.oid), 0) AS bytes, pg_stat_get_live_tuples(c.oid) AS readings, coalesce(pg_relation_size(c.oid), 0) > 0 AS is_used
			 FROM pg_class c WHERE c.relkind = 'r' AND c.relnamespace = 'public'::regnamespace ORDER BY day`,
		),
		pool.query<{ bytes: number }>('SELECT pg_database_size(current_database()) AS bytes'),
		pool.query<{
			packed_until: Date | null;
			day_in_work: string | null;
			finished_at: Date | null;
			error: string | null;
			must_regroup: boolean;
		}>(
			`SELECT nullif(packed_until, '-infinity') AS packed_until, finished_at, error, must_regroup,
				CASE WHEN closed_until > packed_until THEN to_char(closed_until - interval '1 day', 'YYYY-MM-DD') END AS day_in_work FROM packing_state`,
		),
		pool.query<{ day: string; readings: number; blocks: number; bytes: number; work_ms: number; packed_at: Date }>(
			`SELECT to_char(day, 'YYYY-MM-DD') AS day, readings, blocks, bytes, work_ms, packed_at FROM packed_days ORDER BY day DESC LIMIT 60`,
		),
	]);
	const bytes: StoreSize['bytes'] = { rows: 0, blocks: 0, minute: 0, hour: 0, journal: 0, rest: 0 };
	const since: StoreSize['since'] = { rows: null, blocks: null, minute: null, hour: null, journal: null };
	for (const table of tables.rows) {
		if (table.kind === 'rest') continue;
		bytes[table.kind] += table.bytes;
		// Tables made ahead are empty and say nothing.
		if (table.day !== null && table.is_used) since[table.kind] ??= Date.parse(table.day);
	}
	bytes.rest = Math.max(0, (whole.rows[0]?.bytes ?? 0) - Object.values(bytes).reduce((sum, size) => sum + size, 0));
	const now = state.rows[0];
	const rowDays = tables.rows.flatMap((table) =>
		table.kind === 'rows' && table.day !== null && table.is_used
			? [{ day: table.day, readings: table.readings, bytes: table.bytes }]
			: [],
	);
	return {
		bytes,
		since,
		rowDays,
		packedDays: packed.rows.map((row) => ({
			day: row.day,
			readings: row.readings,
			blocks: row.blocks,
			bytes: row.bytes,
			workMs: row.work_ms,
			packedAt: row.packed_at.getTime(),
		})),
		lateRows: tables.rows.find((table) => table.kind === 'rows' && table.day === null)?.readings ?? 0,
		packing: {
			packedUntil: now?.packed_until?.getTime() ?? null,
			dayInWork: now?.day_in_work ?? null,
			lastRunAt: now?.finished_at?.getTime() ?? null,
			error: now?.error ?? null,
			mustRegroup: now?.must_regroup ?? false,
		},
	};
}
