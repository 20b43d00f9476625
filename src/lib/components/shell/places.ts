// Pure.
import type { SitePermission } from '#lib/domain/access/permission.ts';

/** A place of the site, with the permission that opens it. */
export interface Place {
	label: string;
	path: string;
	permission: SitePermission;
	/** In the bar; the others stand in the person's menu. */
	inBar: boolean;
	key: string;
}

/** Every place there is, in the order of the bar. `key` follows `g` on the keyboard. */
export const PLACES: readonly Place[] = [
	{ label: 'Overview', path: '', permission: 'site:read', inBar: true, key: 'o' },
	{ label: 'Sources', path: '/sources', permission: 'site:read', inBar: true, key: 's' },
	{ label: 'Tag map', path: '/tag-map', permission: 'site:read', inBar: true, key: 't' },
	{ label: 'Machines', path: '/machines', permission: 'site:read', inBar: true, key: 'm' },
	{ label: 'Alarms', path: '/alarms', permission: 'site:read', inBar: true, key: 'a' },
	{ label: 'Limits', path: '/limits', permission: 'site:read', inBar: false, key: 'l' },
	{ label: 'Keys', path: '/keys', permission: 'keys:edit', inBar: false, key: 'k' },
	{ label: 'Audit', path: '/audit', permission: 'audit:read', inBar: false, key: 'u' },
];

/** The place that a path is inside of. */
export function placeOf(pathname: string, site: string): Place | undefined {
	const rest = pathname.slice(site.length + 1);
	if (rest === '' || rest === '/') return PLACES[0];
	if (rest.startsWith('/tags/')) return PLACES.find((place) => place.path === '/machines');
	return PLACES.find((place) => place.path !== '' && (rest === place.path || rest.startsWith(`${place.path}/`)));
}
