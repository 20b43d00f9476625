// Edge: store. May touch: pool; latest values, to read.
import type { Pool } from '#lib/server/db/pool.ts';
import type { Verdict } from '#lib/domain/reading.ts';
import { STATUS_CODES } from '#lib/domain/quality.ts';
import { currentCursor } from './find-feed.ts';

export interface LatestRow {
	tagId: number;
	tag: string;
	unit: string;
	detector: string;
	/** Null before the first reading. */
	at: number | null;
	receivedAt: number | null;
	isHubTime: boolean;
	value: number | null;
	quality: number;
	verdict: Verdict;
	isStale: boolean;
	reason: string | null;
	/** A test value stands in for the tag's own. */
	isTest: boolean;
	testUntil: number | null;
	/** The tag's true value beside a test value. */
	trueValue: number | null;
}

export interface LatestQuery {
	/** Names in any case; null for all. */
	names: readonly string[] | null;
	/** Tag id that the page before ended at. */
	afterId: number;
	limit: number;
}

/**
 * Latest values in the order of the tags' ids, with the feed's cursor taken before the read, so that latest and then the feed from there miss nothing.
 * A tag without a reading yet is `BadWaitingForInitialData`.
 */
export async function findLatest(pool: Pool, siteId: number, query: LatestQuery): Promise<{ rows: LatestRow[]; cursor: string }> {
	const cursor = await currentCursor(pool, siteId);
	const found = await pool.query<{
		id: number;
		name: string;
		unit: string;
		detector: string;
		at: Date | null;
		received_at: Date | null;
		is_hub_time: boolean | null;
		value: number | null;
		quality: number | null;
		verdict: Verdict | null;
		is_stale: boolean | null;
		reason: string | null;
		test_value: number | null;
		test_until: Date | null;
		test_at: Date | null;
	}>(
		`SELECT t.id, t.name, t.unit, t.detector, l.at, l.received_at, l.is_hub_time, l.value, l.quality, l.verdict, l.is_stale, l.reason,
			v.value AS test_value, v.until AS test_until, v.set_at AS test_at
		 FROM tags t LEFT JOIN latest l ON l.tag_id = t.id
		 LEFT JOIN LATERAL (SELECT value, until, set_at FROM test_values v WHERE v.tag_id = t.id AND v.ended_at IS NULL AND v.until > now() ORDER BY v.id DESC LIMIT 1) v ON true
		 WHERE t.site_id = $1 AND t.published_at IS NOT NULL AND t.retired_at IS NULL AND t.id > $2 AND ($3::text[] IS NULL OR lower(t.name) = ANY($3))
		 ORDER BY t.id LIMIT $4`,
		[siteId, query.afterId, query.names?.map((name) => name.toLowerCase()) ?? null, query.limit],
	);
	const rows = found.rows.map((row): LatestRow => {
		const isTest = row.test_until !== null;
		return {
			tagId: row.id,
			tag: row.name,
			unit: row.unit,
			detector: row.detector,
			at: (isTest ? row.test_at : row.at)?.getTime() ?? null,
			receivedAt: (isTest ? row.test_at : row.received_at)?.getTime() ?? null,
			isHubTime: isTest ? true : (row.is_hub_time ?? true),
			value: isTest ? row.test_value : row.value,
			quality: isTest
				? STATUS_CODES.GoodLocalOverride
				: row.quality === null
					? STATUS_CODES.BadWaitingForInitialData
					: row.quality >>> 0,
			verdict: row.verdict ?? 'unknown',
			isStale: row.is_stale ?? false,
			reason: isTest ? 'test-value' : row.reason,
			isTest,
			testUntil: row.test_until?.getTime() ?? null,
			trueValue: isTest ? row.value : null,
		};
	});
	return { rows, cursor };
}
