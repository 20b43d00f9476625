// Tests. Packing without rests, and everything stored of some tags as text that differs where one bit does.
import { packDay } from '#lib/pipeline/store/pack-day.ts';
import { packLate } from '#lib/pipeline/store/pack-late.ts';
import type { Pool } from '#lib/server/db/pool.ts';

export const DAY_MS = 86_400_000;
export const dayOf = (at: number) => new Date(at).toISOString().slice(0, 10);

/** Packs the day of `at` to its end; answers the readings packed. */
export async function packWhole(pool: Pool, at: number): Promise<number | null> {
	return packDay(pool, dayOf(at), { signal: new AbortController().signal, rest: 0 });
}

export async function packLateWhole(pool: Pool): Promise<number> {
	return packLate(pool, { signal: new AbortController().signal, rest: 0 });
}

/** Every column of every stored reading of the tags, values as their eight bytes. */
export async function everything(pool: Pick<Pool, 'query'>, tagIds: readonly number[]): Promise<string[]> {
	const found = await pool.query<{ line: string }>(
		`SELECT * FROM (SELECT concat_ws('|', tag_id, at, encode(float8send(value), 'hex'), value IS NULL, quality, received_at, is_hub_time, revision,
			coalesce(source_at::text, '-'), coalesce(quote_literal(reason), '-'), coalesce(quote_literal(raw), '-'), hour) AS line
		 FROM reading_history WHERE tag_id = ANY($1)) lines ORDER BY line COLLATE "C"`,
		[tagIds],
	);
	return found.rows.map((row) => row.line);
}
