// Pure.
/** Everything a person or a key can be allowed to do at one site. `semantics.md`'s table of rights, row by row. */
export const SITE_PERMISSIONS = [
	'site:read',
	'sources:edit',
	'sources:test',
	'machines:edit',
	'map:edit',
	'map:publish',
	'feeds:edit',
	'keys:edit',
	'limits:edit',
	'alarms:acknowledge',
	'test-values:set',
	'point-checks:edit',
	'cases:edit',
	'audit:read',
] as const;

/** Rights over the whole installation; only `admin` has them. */
export const INSTALLATION_PERMISSIONS = [
	'sites:edit',
	'people:edit',
	'certificates:edit',
	'mail:edit',
	'backups:run',
	'store:edit',
	'installation:read',
] as const;

export type SitePermission = (typeof SITE_PERMISSIONS)[number];
export type InstallationPermission = (typeof INSTALLATION_PERMISSIONS)[number];
export type Permission = SitePermission | InstallationPermission;
