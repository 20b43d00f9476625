import { z } from 'zod';
import { qualityJson } from '#lib/domain/quality.ts';
import { findReadings, type ReadingKey, type ReadingRow } from '#lib/pipeline/store/find-readings.ts';
import { qualitySchema } from '#lib/server/feed/answer-schema.ts';
import { api } from '#lib/server/http/api.ts';
import { decodeCursor, encodeCursor } from '#lib/server/http/cursor.ts';
import { CSV_TYPE, JSON_TYPE, NDJSON_TYPE } from '#lib/server/http/negotiate.ts';
import { intParam, timeParam } from '#lib/server/http/parameters.ts';
import { Problem } from '#lib/server/http/problem.ts';
import { toRfc3339 } from '#lib/server/http/rfc3339.ts';
import { rowStream, type Columns } from '#lib/server/http/row-stream.ts';
import { findTag } from '#lib/server/tags/find-tags.ts';

const readingJson = z.object({
	at: z.iso.datetime(),
	value: z.number().nullable(),
	quality: qualitySchema,
	time_from: z.enum(['source', 'hub']),
});
type ReadingJson = z.infer<typeof readingJson>;

const cursor = z.string().transform((text, ctx): ReadingKey => {
	const [at, value, quality] = decodeCursor(text) ?? [];
	// A missing value stands as an empty text: a cursor holds texts and numbers only.
	if (typeof at === 'number' && typeof quality === 'number' && (typeof value === 'number' || value === '')) {
		return { at, value: value === '' ? null : value, quality };
	}
	ctx.addIssue({ code: 'custom', message: 'not a cursor of this list' });
	return z.NEVER;
});

const toJson = (row: ReadingRow): ReadingJson => ({
	at: toRfc3339(row.at),
	value: row.value,
	quality: qualityJson(row.quality),
	time_from: row.isHubTime ? 'hub' : 'source',
});

const COLUMNS: Columns<ReadingJson> = [
	['at', (row) => row.at],
	['value', (row) => row.value],
	['quality', (row) => row.quality.code],
	['quality_name', (row) => row.quality.name],
	['time_from', (row) => row.time_from],
];

/** Rows fetched at a time while a whole range streams. */
const STREAM_PAGE = 5_000;

export const GET = api(
	{
		summary:
			'Stored readings of one tag, in its published unit, over the half-open range. CSV and NDJSON without `limit` hold all of them.',
		permission: 'site:read',
		query: z.strictObject({
			from: timeParam.optional(),
			to: timeParam.optional(),
			order: z.enum(['oldest', 'newest']).default('oldest'),
			after: cursor.optional(),
			limit: intParam(1, 10_000).optional(),
		}),
		answer: z.object({ unit: z.string(), items: z.array(readingJson), next: z.string().nullable() }),
		answerTypes: [CSV_TYPE, NDJSON_TYPE],
	},
	async ({ db, pool, site, params, query, answerType, headers }) => {
		const tag = await findTag(db, site.id, params.name);
		if (!tag) throw new Problem(404, 'tag-not-found', 'No published tag at this site has that name.');
		const limit = query.limit ?? (answerType === JSON_TYPE ? 1_000 : STREAM_PAGE);
		const read = async (after: ReadingKey | null) => {
			const rows = await findReadings(pool, tag.id, {
				from: query.from ?? null,
				to: query.to ?? null,
				order: query.order,
				limit: limit + 1,
				after,
			});
			const page = rows.slice(0, limit);
			return { items: page.map(toJson), last: rows.length > limit ? (page.at(-1) ?? null) : null };
		};
		const first = await read(query.after ?? null);
		const next = first.last ? encodeCursor([first.last.at, first.last.value ?? '', first.last.quality]) : null;
		if (answerType === JSON_TYPE) return { unit: tag.unit, items: first.items, next };
		headers.set('x-unit', encodeURIComponent(tag.unit));
		if (query.limit !== undefined && next !== null) headers.set('x-next-cursor', next);
		return rowStream(answerType, pages(first, query.limit === undefined ? read : null), COLUMNS);
	},
);

type Page = { items: ReadingJson[]; last: ReadingRow | null };

async function* pages(first: Page, read: ((after: ReadingKey) => Promise<Page>) | null): AsyncGenerator<ReadingJson[]> {
	let page = first;
	yield page.items;
	while (read && page.last) {
		page = await read(page.last);
		yield page.items;
	}
}
