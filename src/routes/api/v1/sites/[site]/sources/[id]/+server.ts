import { api } from '#lib/server/http/api.ts';
import { badInput, badPointer, Problem } from '#lib/server/http/problem.ts';
import { sourceChange, sourceJson, toSourceJson } from '#lib/server/source-setup/source-schema.ts';
import { findSource } from '#lib/server/source-setup/find-sources.ts';
import { deleteSource, updateSource } from '#lib/server/source-setup/save-source.ts';

const notFound = () => new Problem(404, 'source-not-found', 'This site has no source of that id.');

export const GET = api(
	{ summary: 'One source, without its secrets.', permission: 'site:read', answer: sourceJson },
	async ({ pool, site, params }) => {
		const source = await findSource(pool, site.id, params.id);
		if (!source) throw notFound();
		return toSourceJson(source);
	},
);

export const PATCH = api(
	{
		summary: 'Changes what is given and keeps the rest; secrets not sent stay.',
		permission: 'sources:edit',
		body: sourceChange,
		answer: sourceJson,
		refusals: [409],
	},
	async ({ pool, site, params, body, actor, ip }) => {
		const before = await findSource(pool, site.id, params.id);
		if (!before) throw notFound();
		if (body.kind != null && body.kind !== before.kind)
			throw badPointer('/kind', `the kind stays ${before.kind}; add another source instead`);
		const { kind: _kind, contact, notes, ...rest } = body;
		const change = Object.fromEntries(Object.entries(rest).filter(([, value]) => value != null));
		const outcome = await updateSource(pool, before.id, { ...change, contact, notes }, { siteId: site.id, actor, ip });
		if (outcome.ok) return toSourceJson(outcome.value);
		switch (outcome.reason) {
			case 'settings':
				throw badInput(
					outcome.issues.map(({ path, message }) => ({ pointer: `/${path.map(String).join('/')}`, detail: message })),
				);
			case 'not-found':
				throw notFound();
			default:
				throw new Problem(409, outcome.reason, `${outcome.detail ?? 'Refused as things stand'}.`);
		}
	},
);

export const DELETE = api(
	{ summary: 'Removes a source that no published tag reads.', permission: 'sources:edit', status: 204, refusals: [409] },
	async ({ pool, site, params, actor, ip }) => {
		const source = await findSource(pool, site.id, params.id);
		if (!source) throw notFound();
		const outcome = await deleteSource(pool, source.id, { siteId: site.id, actor, ip });
		if (outcome.ok) return undefined;
		if (outcome.reason === 'not-found') throw notFound();
		throw new Problem(409, outcome.reason, `${outcome.detail ?? 'Published tags read it'}.`);
	},
);
