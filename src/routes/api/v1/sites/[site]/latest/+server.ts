import { z } from 'zod';
import { qualityJson } from '#lib/domain/quality.ts';
import { findLatest } from '#lib/pipeline/store/find-latest.ts';
import { qualitySchema } from '#lib/server/feed/answer-schema.ts';
import { resolveTags } from '#lib/server/feed/resolve-place.ts';
import { api } from '#lib/server/http/api.ts';
import { encodeCursor } from '#lib/server/http/cursor.ts';
import { idCursorParam, limitParam, namesParam } from '#lib/server/http/parameters.ts';
import { toRfc3339 } from '#lib/server/http/rfc3339.ts';

const time = z.iso.datetime().nullable();
const latestJson = z.object({
	tag: z.string(),
	at: time,
	received_at: time,
	time_from: z.enum(['source', 'hub']),
	value: z.number().nullable(),
	unit: z.string(),
	quality: qualitySchema,
	verdict: z.enum(['normal', 'alert', 'danger', 'unknown']),
	stale: z.boolean(),
	test: z.boolean(),
	/** While a test value stands: the tag's own value, and when the test ends. */
	true_value: z.number().nullable().optional(),
	test_until: z.iso.datetime().optional(),
});

export const GET = api(
	{
		summary: 'Latest value of each tag, with the cursor taken before the read: the feed from there misses nothing.',
		permission: 'site:read',
		query: z.strictObject({ tags: namesParam.optional(), after: idCursorParam.optional(), limit: limitParam() }),
		answer: z.object({ items: z.array(latestJson), cursor: z.string(), next: z.string().nullable() }),
	},
	async ({ pool, site, query }) => {
		await resolveTags(pool, site.id, query.tags);
		const { rows, cursor } = await findLatest(pool, site.id, {
			names: query.tags ?? null,
			afterId: query.after ?? 0,
			limit: query.limit + 1,
		});
		const page = rows.slice(0, query.limit);
		const last = page.at(-1);
		return {
			items: page.map((row) => ({
				tag: row.tag,
				at: row.at === null ? null : toRfc3339(row.at),
				received_at: row.receivedAt === null ? null : toRfc3339(row.receivedAt),
				time_from: row.isHubTime ? ('hub' as const) : ('source' as const),
				value: row.value,
				unit: row.unit,
				quality: qualityJson(row.quality),
				verdict: row.verdict,
				stale: row.isStale,
				test: row.isTest,
				...(row.isTest && row.testUntil !== null ? { true_value: row.trueValue, test_until: toRfc3339(row.testUntil) } : {}),
			})),
			cursor,
			next: rows.length > query.limit && last ? encodeCursor([last.tagId]) : null,
		};
	},
);
