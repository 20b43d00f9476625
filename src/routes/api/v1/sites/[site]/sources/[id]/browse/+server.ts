import { z } from 'zod';
import { api } from '#lib/server/http/api.ts';
import { Problem } from '#lib/server/http/problem.ts';
import { browseItem } from '#lib/server/source-setup/source-schema.ts';
import { findSourceRow } from '#lib/server/source-setup/find-sources.ts';
import { browseSource } from '#lib/server/source-setup/test-source.ts';

export const GET = api(
	{
		summary: 'Children of a node; of the root without `node`.',
		permission: 'sources:test',
		query: z.strictObject({ node: z.string().max(1_000).optional() }),
		answer: z.object({ items: z.array(browseItem) }),
		refusals: [409, 503],
	},
	async ({ pool, site, params, query }) => {
		const source = await findSourceRow(pool, site.id, params.id);
		if (!source) throw new Problem(404, 'source-not-found', 'This site has no source of that id.');
		const items = await browseSource(pool, source, query.node ?? null).catch((error: Error) => {
			throw new Problem(503, 'source-unavailable', error.message, { cause: error });
		});
		if (items === null) throw new Problem(409, 'no-browsing', `A source of kind ${source.kind} cannot be looked through.`);
		return { items };
	},
);
