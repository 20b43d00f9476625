import { z } from 'zod';
import { api } from '#lib/server/http/api.ts';
import { decodeIdCursor, encodeCursor } from '#lib/server/http/cursor.ts';
import { badParameter } from '#lib/server/http/problem.ts';
import { listRevisions } from '#lib/server/tag-map/list-revisions.ts';

export const GET = api(
	{
		summary: 'Revisions of the tag map, newest first.',
		permission: 'site:read',
		query: z.strictObject({ after: z.string().optional(), limit: z.coerce.number().int().min(1).max(10_000).default(1_000) }),
		answer: z.object({
			items: z.array(
				z.object({
					revision: z.int(),
					published_at: z.string(),
					published_by: z.string(),
					note: z.string(),
					started: z.int(),
					stopped: z.int(),
					changed: z.int(),
					restored_from: z.int().nullable(),
				}),
			),
			next: z.string().nullable(),
		}),
	},
	async ({ db, site, query }) => {
		const before = query.after === undefined ? null : decodeIdCursor(query.after);
		if (query.after !== undefined && before === null) throw badParameter('after', 'not a cursor of this list');
		const found = await listRevisions(db, site.id, { before, limit: query.limit + 1 });
		const page = found.slice(0, query.limit);
		const last = page.at(-1);
		return {
			items: page.map((entry) => ({
				revision: entry.revision,
				published_at: entry.publishedAt.toISOString(),
				published_by: entry.publishedBy,
				note: entry.note,
				started: entry.started,
				stopped: entry.stopped,
				changed: entry.changed,
				restored_from: entry.restoredFrom,
			})),
			next: found.length > query.limit && last ? encodeCursor([last.revision]) : null,
		};
	},
);
