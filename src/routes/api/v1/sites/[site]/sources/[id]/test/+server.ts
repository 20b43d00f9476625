import { z } from 'zod';
import { api } from '#lib/server/http/api.ts';
import { Problem } from '#lib/server/http/problem.ts';
import { testReport } from '#lib/server/source-setup/source-schema.ts';
import { findSourceRow } from '#lib/server/source-setup/find-sources.ts';
import { testSource } from '#lib/server/source-setup/test-source.ts';

export const POST = api(
	{
		summary: 'Tests a saved source, over its own connection where it runs.',
		permission: 'sources:test',
		body: z.strictObject({}),
		bodyOptional: true,
		answer: testReport,
	},
	async ({ pool, site, params }) => {
		const source = await findSourceRow(pool, site.id, params.id);
		if (!source) throw new Problem(404, 'source-not-found', 'This site has no source of that id.');
		return testSource(pool, source);
	},
);
