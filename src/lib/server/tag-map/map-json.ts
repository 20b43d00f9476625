// Edge: tag map. Shapes of the map in the API. May touch: zod, domain.
import { z } from 'zod';
import { mapToCsv } from '#lib/domain/tag-map/csv.ts';
import type { MapDiff } from '#lib/domain/tag-map/diff.ts';
import { mapRowSchema, type DraftCheck, type MapRow } from '#lib/domain/tag-map/row.ts';
import { CSV_TYPE } from '#lib/server/http/negotiate.ts';

/** A row as the API answers it: what is said, nothing that is null. */
export const rowJson = mapRowSchema.extend({
	row_version: z.int().optional(),
	state: z.enum(['published', 'added', 'changed', 'removed']).optional(),
});

/** A row as the API takes it: any part of a row, its version when it was read, or its removal. */
export const sentRow = mapRowSchema.partial().extend({
	row_version: z.int().optional(),
	delete: z.literal(true).optional(),
	/** Answered by GET, so taken back unread. */
	state: z.string().optional(),
});

const findingJson = z.object({
	tag: z.string(),
	row: z.int(),
	field: z.string().nullable(),
	code: z.string(),
	detail: z.string(),
});
export const checkJson = z.object({ errors: z.array(findingJson), warnings: z.array(findingJson), version: z.int() });
export const publishedJson = z.object({ revision: z.int(), started: z.int(), stopped: z.int(), changed: z.int() });
export const diffJson = z.object({
	from: z.int(),
	to: z.int(),
	added: z.array(rowJson),
	removed: z.array(rowJson),
	changed: z.array(z.object({ id: z.int(), tag: z.string(), fields: z.array(z.string()), before: rowJson, after: rowJson })),
	unchanged: z.int(),
});

export const NO_CHECK: DraftCheck = { errors: [], warnings: [], version: 0 };

/** The ETag of a draft's version. */
export function draftTag(version: number): string {
	return `"draft-${version}"`;
}

/** The version that an If-Match names: null without the header or with `*`; -1, which no draft has, for another tag. */
export function versionOfTag(header: string | null): number | null {
	if (header === null || header.trim() === '*') return null;
	const match = /^(?:W\/)?"draft-(\d+)"$/.exec(header.trim());
	return match ? Number(match[1]) : -1;
}

/** Rows as a CSV answer. */
export function csvAnswer(rows: readonly MapRow[], name: string, headers: Record<string, string> = {}): Response {
	return new Response(mapToCsv(rows), {
		headers: {
			'content-type': `${CSV_TYPE}; charset=utf-8`,
			'content-disposition': `attachment; filename="${name}.csv"`,
			...headers,
		},
	});
}

export function diffAnswer(diff: MapDiff, from: number, to: number): z.input<typeof diffJson> {
	return { from, to, ...diff };
}
