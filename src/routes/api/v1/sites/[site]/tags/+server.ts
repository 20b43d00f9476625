import { z } from 'zod';
import { api } from '#lib/server/http/api.ts';
import { decodeCursor } from '#lib/server/http/cursor.ts';
import { CSV_TYPE, JSON_TYPE, NDJSON_TYPE } from '#lib/server/http/negotiate.ts';
import { boolParam, intParam } from '#lib/server/http/parameters.ts';
import { pagesOf, rowStream, type Columns } from '#lib/server/http/row-stream.ts';
import { findTags } from '#lib/server/tags/find-tags.ts';
import { tagJson, type TagJson } from '#lib/server/tags/tag-json.ts';

const cursor = z.string().transform((text, ctx): [string, number] => {
	const [name, id, ...rest] = decodeCursor(text) ?? [];
	if (typeof name === 'string' && Number.isSafeInteger(id) && rest.length === 0) return [name, Number(id)];
	ctx.addIssue({ code: 'custom', message: 'not a cursor of this list' });
	return z.NEVER;
});

const COLUMNS: Columns<TagJson> = [
	['id', (tag) => tag.id],
	['name', (tag) => tag.name],
	['plant_tag', (tag) => tag.plant_tag],
	['description', (tag) => tag.description],
	['area', (tag) => tag.area],
	['machine', (tag) => tag.machine],
	['point', (tag) => tag.point],
	['axis', (tag) => tag.axis],
	['quantity', (tag) => tag.quantity],
	['unit', (tag) => tag.unit],
	['detector', (tag) => tag.detector],
	['low_range', (tag) => tag.range.low],
	['high_range', (tag) => tag.range.high],
	['source', (tag) => tag.source],
	['states', (tag) => tag.states],
	['retired', (tag) => tag.retired],
];

export const GET = api(
	{
		summary: 'Published tags of the site, by name. CSV and NDJSON without `limit` hold all of them.',
		permission: 'site:read',
		query: z.strictObject({
			search: z.string().max(200).optional(),
			machine: z.string().max(500).optional(),
			source: z.string().max(200).optional(),
			retired: boolParam.default(false),
			after: cursor.optional(),
			limit: intParam(1, 10_000).optional(),
		}),
		answer: z.object({ items: z.array(tagJson), next: z.string().nullable() }),
		answerTypes: [CSV_TYPE, NDJSON_TYPE],
	},
	async ({ db, site, query, answerType, headers }) => {
		const { retired, limit = 1_000, ...filter } = query;
		const read = (after: [string, number] | undefined) =>
			findTags(db, { ...filter, siteId: site.id, isRetired: retired, after, limit });
		const first = await read(query.after);
		if (answerType === JSON_TYPE) return first;
		if (query.limit !== undefined) {
			if (first.next !== null) headers.set('x-next-cursor', first.next);
			return rowStream(answerType, one(first.items), COLUMNS);
		}
		const pages = pagesOf(async (after) => (after === undefined ? first : read(cursor.parse(after))));
		return rowStream(answerType, pages, COLUMNS);
	},
);

async function* one<T>(page: T): AsyncGenerator<T> {
	yield page;
}
