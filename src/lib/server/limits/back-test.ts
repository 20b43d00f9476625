// Edge: limits. May touch: limit tables; store finders.
import { and, eq, inArray, isNotNull, isNull, sql } from 'drizzle-orm';
import type { Limit } from '#lib/domain/limit.ts';
import type { PlannedLimit } from '#lib/domain/tag-map/tag-plan.ts';
import { createReplay, type ReplayCount } from '#lib/pipeline/evaluate/replay.ts';
import { findReadings, type ReadingKey } from '#lib/pipeline/store/find-readings.ts';
import { createDb, type Pool } from '#lib/server/db/pool.ts';
import { tags } from '#lib/server/db/schema/tag-map.ts';
import { findLimitsOf } from './list-limits.ts';

/** Readings fetched at a time; the event loop runs between two pages. */
const PAGE = 10_000;
/** Most readings of one back-test; about half a minute of work. */
export const MOST_READINGS = 2_000_000;

export interface BackTestInput {
	siteId: number;
	limits: readonly Limit[];
	/** Half-open, ms. */
	from: number;
	to: number;
	signal: AbortSignal;
}

export interface BackTestItem extends ReplayCount {
	limit: Limit;
}

export interface BackTest {
	items: BackTestItem[];
	/** The limits of the same tags that stand now, over the same readings. */
	standing: BackTestItem[];
	/** Limits that stored readings say nothing of: staleness is judged by keep-alives too, which are not stored. */
	skipped: Limit[];
	readings: number;
	/** Where it stopped: the end asked for, or the last reading before the bound of work. */
	until: number;
	isComplete: boolean;
}

/** Replays stored readings against limits given and those in force. `unknown` names tags that are not published here. */
export async function backTest(pool: Pool, input: BackTestInput): Promise<BackTest | { unknown: string[] }> {
	const db = createDb(pool);
	const names = [...new Set(input.limits.map((limit) => limit.tag.toLowerCase()))];
	const found = await db
		.select({ id: tags.id, name: tags.name })
		.from(tags)
		.where(
			and(
				eq(tags.siteId, input.siteId),
				isNotNull(tags.publishedAt),
				isNull(tags.retiredAt),
				inArray(sql`lower(${tags.name})`, names),
			),
		);
	const known = new Set(found.map((tag) => tag.name.toLowerCase()));
	const unknown = names.filter((name) => !known.has(name));
	if (unknown.length > 0) return { unknown };
	const standingOf = await findLimitsOf(
		db,
		found.map((tag) => tag.id),
	);
	const test: BackTest = { items: [], standing: [], skipped: [], readings: 0, until: input.to, isComplete: true };
	for (const tag of found) {
		const given = input.limits.filter((limit) => limit.tag.toLowerCase() === tag.name.toLowerCase());
		const replayed = given.filter((limit) => limit.kind !== 'stale');
		test.skipped.push(...given.filter((limit) => limit.kind === 'stale'));
		const standing = (standingOf.get(tag.id) ?? []).filter((limit) => limit.kind !== 'stale');
		const all = [...replayed, ...standing];
		const replay = createReplay(all.map((limit, index): PlannedLimit => ({ ...limit, limitId: index + 1 })));
		const until = await replayTag(pool, tag.id, replay, input, test);
		const counts = replay.finish(until);
		all.forEach((limit, index) => {
			const count = counts[index];
			if (count) (index < replayed.length ? test.items : test.standing).push({ limit, ...count });
		});
		if (!test.isComplete) {
			test.until = until;
			break;
		}
	}
	return test;
}

/** Answers how far it came. */
async function replayTag(
	pool: Pool,
	tagId: number,
	replay: ReturnType<typeof createReplay>,
	{ from, to, signal }: BackTestInput,
	test: BackTest,
): Promise<number> {
	let after: ReadingKey | null = null;
	for (;;) {
		signal.throwIfAborted();
		const rows = await findReadings(pool, tagId, { from, to, order: 'oldest', limit: PAGE, after });
		for (const row of rows) {
			replay.take({
				tagId,
				at: row.at,
				value: row.value,
				quality: row.quality,
				timeFrom: row.isHubTime ? 'hub' : 'source',
				receivedAt: row.receivedAt,
				sourceAt: row.sourceAt,
				reason: null,
				raw: null,
				wire: null,
				revision: row.revision,
			});
		}
		test.readings += rows.length;
		const last = rows.at(-1);
		if (!last || rows.length < PAGE) return to;
		if (test.readings >= MOST_READINGS) {
			test.isComplete = false;
			return last.at;
		}
		after = { at: last.at, value: last.value, quality: last.quality };
	}
}
