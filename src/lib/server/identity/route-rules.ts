// Pure.
import type { Permission } from '#lib/domain/access/permission.ts';

/**
 * Who may ask for a route. `api`: the endpoint's own declaration decides. `permission`: at the site of the path,
 * or over the installation. Whatever a route does beyond being seen asks again where it is done.
 */
export type RouteRule = 'public' | 'signed-in' | 'api' | { permission: Permission };

const at = (permission: Permission): RouteRule => ({ permission });

/** Every route there is, by Kit's route id. A route that is not here is refused. */
export const ROUTE_RULES: Readonly<Record<string, RouteRule>> = {
	'/(app)': 'signed-in',
	'/(public)/sign-in': 'public',
	'/(public)/sign-out': 'public',
	'/(public)/invite/[token]': 'public',
	'/(public)/reset': 'public',
	'/(public)/reset/[token]': 'public',

	'/(app)/account': 'signed-in',
	'/(app)/[site]': at('site:read'),
	'/(app)/[site]/pulse': at('site:read'),
	'/(app)/[site]/keys': at('keys:edit'),
	'/(app)/[site]/machines': at('site:read'),
	'/(app)/[site]/machines/[id]': at('site:read'),
	'/(app)/[site]/tags/[tag]': at('site:read'),
	'/(app)/[site]/sources': at('site:read'),
	'/(app)/[site]/sources/new': at('sources:edit'),
	'/(app)/[site]/sources/[id]': at('site:read'),
	'/(app)/[site]/dead-letters': at('sources:edit'),
	'/(app)/[site]/tag-map': at('site:read'),
	'/(app)/[site]/tag-map/revisions': at('site:read'),
	'/(app)/[site]/limits': at('site:read'),
	'/(app)/[site]/alarms': at('site:read'),
	'/(app)/[site]/audit': at('audit:read'),
	'/(app)/admin/people': at('people:edit'),
	'/(app)/admin/mails': at('mail:edit'),
	'/(app)/admin/store': at('store:edit'),

	'/healthz': 'public',
	'/readyz': 'public',
	'/metrics': 'public',
	'/api/v1/openapi.json': 'public',
	'/api/v1/sites': 'api',
	'/api/v1/sites/[site]/tags': 'api',
	'/api/v1/sites/[site]/tags/[name]': 'api',
	'/api/v1/sites/[site]/tags/[name]/readings': 'api',
	'/api/v1/sites/[site]/tags/[name]/trend': 'api',
	'/api/v1/sites/[site]/tags/[name]/trace': 'api',
	'/api/v1/sites/[site]/tags/[name]/shelve': 'api',
	'/api/v1/sites/[site]/tags/[name]/unshelve': 'api',
	'/api/v1/sites/[site]/tags/[name]/out-of-service': 'api',
	'/api/v1/sites/[site]/tags/[name]/return-to-service': 'api',
	'/api/v1/sites/[site]/latest': 'api',
	'/api/v1/sites/[site]/feed': 'api',
	'/api/v1/sites/[site]/stream': 'api',
	'/api/v1/sites/[site]/alarms': 'api',
	'/api/v1/sites/[site]/alarms/[id]/acknowledge': 'api',
	'/api/v1/sites/[site]/sources': 'api',
	'/api/v1/sites/[site]/sources/test': 'api',
	'/api/v1/sites/[site]/sources/[id]': 'api',
	'/api/v1/sites/[site]/sources/[id]/test': 'api',
	'/api/v1/sites/[site]/sources/[id]/browse': 'api',
	'/api/v1/sites/[site]/sources/[id]/health': 'api',
	'/api/v1/sites/[site]/dead-letters': 'api',
	'/api/v1/sites/[site]/dead-letters/send-again': 'api',
	'/api/v1/sites/[site]/machines': 'api',
	'/api/v1/sites/[site]/machines/[id]': 'api',
	'/api/v1/sites/[site]/machines/[id]/out-of-service': 'api',
	'/api/v1/sites/[site]/machines/[id]/return-to-service': 'api',
	'/api/v1/sites/[site]/map': 'api',
	'/api/v1/sites/[site]/map/draft': 'api',
	'/api/v1/sites/[site]/map/draft/check': 'api',
	'/api/v1/sites/[site]/map/draft/dry-run': 'api',
	'/api/v1/sites/[site]/map/draft/publish': 'api',
	'/api/v1/sites/[site]/map/revisions': 'api',
	'/api/v1/sites/[site]/map/revisions/[n]/diff': 'api',
	'/api/v1/sites/[site]/map/revisions/[n]/restore': 'api',
	'/api/v1/sites/[site]/limits': 'api',
	'/api/v1/sites/[site]/limits/propose': 'api',
	'/api/v1/sites/[site]/limits/back-test': 'api',
	'/api/v1/sites/[site]/test-values': 'api',
};

/** The rule of a route id; null refuses. */
export function findRouteRule(routeId: string): RouteRule | null {
	return Object.hasOwn(ROUTE_RULES, routeId) ? (ROUTE_RULES[routeId] ?? null) : null;
}
