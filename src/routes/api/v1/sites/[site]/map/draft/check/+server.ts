import { api } from '#lib/server/http/api.ts';
import { checkFoundDraft } from '#lib/server/tag-map/check-context.ts';
import { findDraft } from '#lib/server/tag-map/find-map.ts';
import { checkJson } from '#lib/server/tag-map/map-json.ts';

export const POST = api(
	{ summary: 'Checks the draft as it stands: errors and warnings by row.', permission: 'map:edit', answer: checkJson },
	async ({ db, site }) => checkFoundDraft(db, site.id, await findDraft(db, site.id)),
);
