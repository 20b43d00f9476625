// Pure.
import { INSTALLATION_PERMISSIONS, type Permission, type SitePermission } from './permission.ts';
import { ROLE_PERMISSIONS, SCOPE_PERMISSIONS, type KeyScope, type SiteRole } from './role.ts';

/** Who asks: a signed-in person with roles by site slug, or a key with scopes and sites. */
export type Actor =
	| { kind: 'person'; id: string; name: string; email: string; isAdmin: boolean; roles: Readonly<Record<string, SiteRole>> }
	| { kind: 'key'; id: string; name: string; scopes: readonly KeyScope[]; sites: readonly string[] };

const INSTALLATION = new Set<string>(INSTALLATION_PERMISSIONS);

/** True when the actor may see that the site exists at all. */
export function canSeeSite(actor: Actor, site: string): boolean {
	if (actor.kind === 'key') return actor.sites.includes(site);
	return actor.isAdmin || actor.roles[site] !== undefined;
}

/** True when the actor may do it, at the site for site permissions; the server refuses and the browser hides by this one function. */
export function can(actor: Actor, permission: Permission, site: string | null): boolean {
	if (INSTALLATION.has(permission)) return actor.kind === 'person' && actor.isAdmin;
	if (site === null) return false;
	if (actor.kind === 'key') {
		return canSeeSite(actor, site) && actor.scopes.some((scope) => SCOPE_PERMISSIONS[scope].has(permission as SitePermission));
	}
	if (actor.isAdmin) return true;
	const role = actor.roles[site];
	return role !== undefined && ROLE_PERMISSIONS[role].has(permission as SitePermission);
}
