// Edge: store. May touch: pool; settings and retention rules, to read.
import { RETENTION, retentionSchema, type Retention } from '#lib/domain/retention.ts';
import type { Client, Pool } from '#lib/server/db/pool.ts';

/** Key of the installation's retention among the settings. */
export const RETENTION_KEY = 'retention';

type Queryable = Pick<Pool, 'query'> | Pick<Client, 'query'>;

/** The installation's retention: what is set, and the defaults for the rest. */
export async function readRetention(client: Queryable): Promise<Retention> {
	const found = await client.query<{ value: unknown }>('SELECT value FROM settings WHERE key = $1', [RETENTION_KEY]);
	const parsed = retentionSchema.partial().safeParse(found.rows[0]?.value ?? {});
	return { ...RETENTION, ...(parsed.success ? parsed.data : {}) };
}

/** The longest that any tag's raw readings are kept, in days: only a time older than that is never to be trusted. */
export async function longestRawDays(client: Queryable): Promise<number> {
	const { rawDays } = await readRetention(client);
	const found = await client.query<{ days: number | null }>('SELECT max(raw_days) AS days FROM retention_rules');
	return Math.max(rawDays, found.rows[0]?.days ?? 0);
}

/** Days that raw readings of each of these tags are kept. */
export async function rawDaysOf(client: Queryable, tagIds: readonly number[]): Promise<(tagId: number) => number> {
	const { rawDays } = await readRetention(client);
	const found = await client.query<{ tag_id: number; raw_days: number }>(
		'SELECT tag_id, raw_days FROM tag_retention WHERE tag_id = ANY($1) AND raw_days IS NOT NULL',
		[tagIds],
	);
	const byTag = new Map(found.rows.map((row) => [row.tag_id, row.raw_days]));
	return (tagId) => byTag.get(tagId) ?? rawDays;
}
