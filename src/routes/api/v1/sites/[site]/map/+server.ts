import { z } from 'zod';
import { api } from '#lib/server/http/api.ts';
import { CSV_TYPE } from '#lib/server/http/negotiate.ts';
import { findPublishedRows, findRevision } from '#lib/server/tag-map/find-map.ts';
import { csvAnswer, rowJson } from '#lib/server/tag-map/map-json.ts';

export const GET = api(
	{
		summary: 'The published tag map.',
		permission: 'site:read',
		answer: z.object({ revision: z.int(), rows: z.array(rowJson) }),
		answerTypes: [CSV_TYPE],
	},
	async ({ db, site, answerType }) => {
		const rows = await findPublishedRows(db, site.id);
		if (answerType === CSV_TYPE) return csvAnswer(rows, `${site.slug}-map`);
		return { revision: await findRevision(db, site.id), rows };
	},
);
