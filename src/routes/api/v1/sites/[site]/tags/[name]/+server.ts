import { z } from 'zod';
import { mapRowSchema } from '#lib/domain/tag-map/row.ts';
import { api } from '#lib/server/http/api.ts';
import { Problem } from '#lib/server/http/problem.ts';
import { findTag } from '#lib/server/tags/find-tags.ts';
import { tagJson } from '#lib/server/tags/tag-json.ts';

export const GET = api(
	{
		summary: 'One tag, with its mapping and limits.',
		permission: 'site:read',
		answer: tagJson.extend({ mapping: z.object(mapRowSchema.shape).nullable() }),
	},
	async ({ db, site, params }) => {
		const tag = await findTag(db, site.id, params.name);
		if (!tag) throw new Problem(404, 'tag-not-found', 'No published tag at this site has that name.');
		return { ...tag, mapping: tag.mapping as z.infer<typeof mapRowSchema> | null };
	},
);
