// Pure.
import { SITE_PERMISSIONS, type SitePermission } from './permission.ts';

/** Roles granted per site. `admin` is not among them: it is a property of the person, for the whole installation. */
export const SITE_ROLES = ['integrator', 'controls', 'maintenance', 'analyst', 'viewer'] as const;
export type SiteRole = (typeof SITE_ROLES)[number];

/** A named set of permissions for each role; the one table that hooks, pages, API and browser share. */
export const ROLE_PERMISSIONS: Readonly<Record<SiteRole, ReadonlySet<SitePermission>>> = {
	integrator: new Set(SITE_PERMISSIONS),
	controls: new Set<SitePermission>([
		'site:read',
		'sources:test',
		'alarms:acknowledge',
		'test-values:set',
		'point-checks:edit',
		'cases:edit',
		'audit:read',
	]),
	maintenance: new Set<SitePermission>(['site:read', 'alarms:acknowledge', 'cases:edit']),
	analyst: new Set<SitePermission>(['site:read', 'limits:edit', 'alarms:acknowledge', 'cases:edit']),
	viewer: new Set<SitePermission>(['site:read', 'audit:read']),
};

/** Scopes an API key may carry, and what each allows. */
export const KEY_SCOPES = ['read', 'alarms', 'map', 'sources', 'test-values', 'metrics'] as const;
export type KeyScope = (typeof KEY_SCOPES)[number];

export const SCOPE_PERMISSIONS: Readonly<Record<KeyScope, ReadonlySet<SitePermission>>> = {
	read: new Set<SitePermission>(['site:read']),
	alarms: new Set<SitePermission>(['site:read', 'alarms:acknowledge']),
	map: new Set<SitePermission>(['site:read', 'map:edit', 'map:publish', 'limits:edit', 'machines:edit']),
	sources: new Set<SitePermission>(['site:read', 'sources:edit', 'sources:test']),
	'test-values': new Set<SitePermission>(['test-values:set']),
	metrics: new Set<SitePermission>([]),
};
