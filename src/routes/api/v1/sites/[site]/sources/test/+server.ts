import { api } from '#lib/server/http/api.ts';
import { badPointer } from '#lib/server/http/problem.ts';
import { sourceToTest, testReport } from '#lib/server/source-setup/source-schema.ts';
import { findSourceRow } from '#lib/server/source-setup/find-sources.ts';
import { testSettings } from '#lib/server/source-setup/test-source.ts';

export const POST = api(
	{
		summary: 'Tries settings before they are saved, step by step.',
		permission: 'sources:test',
		body: sourceToTest,
		answer: testReport,
	},
	async ({ pool, site, body }) => {
		if (body.id == null) return testSettings(pool, body);
		const saved = await findSourceRow(pool, site.id, body.id);
		if (!saved || saved.kind !== body.kind) throw badPointer('/id', 'no source of this kind has that id');
		const given = Object.fromEntries(Object.entries(body.settings).filter(([, value]) => value != null));
		return testSettings(pool, sourceToTest.parse({ kind: body.kind, settings: { ...saved.secrets, ...given } }));
	},
);
