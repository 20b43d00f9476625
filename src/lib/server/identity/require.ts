// Edge: identity. May touch: user, session, role and key tables; cookies.
import { error, redirect } from '@sveltejs/kit';
import { can, canSeeSite, type Actor } from '#lib/domain/access/can.ts';
import type { Permission } from '#lib/domain/access/permission.ts';
import { webDb } from '#lib/server/db/database.ts';
import { findSite, type Site } from './find-site.ts';

/** A signed-in person; pages are for people, keys are for the API. */
export type Person = Extract<Actor, { kind: 'person' }>;

/** The person who asks. Throws: a redirect (303) to /sign-in without a session. */
export function requirePerson(locals: App.Locals): Person {
	if (locals.actor?.kind !== 'person') redirect(303, '/sign-in');
	return locals.actor;
}

/**
 * The person who asks, if they may; `site` is the slug, null for rights over the whole installation.
 * Throws: a redirect (303) to /sign-in without a session; 404 for a site they may not see; 403 otherwise.
 */
export function requirePermission(locals: App.Locals, site: string | null | undefined, permission: Permission): Person {
	const person = requirePerson(locals);
	if (site != null && !canSeeSite(person, site)) error(404, 'There is no such page.');
	if (!can(person, permission, site ?? null)) error(403, 'Your role does not include this.');
	return person;
}

/** As `requirePermission`, with the site itself; an administrator asking for a site that does not exist meets 404 here. */
export async function requireSite(
	locals: App.Locals,
	slug: string | undefined,
	permission: Permission,
): Promise<{ person: Person; site: Site }> {
	const person = requirePermission(locals, slug ?? '', permission);
	const site = await findSite(webDb(), slug ?? '');
	if (!site) error(404, 'There is no such page.');
	return { person, site };
}
