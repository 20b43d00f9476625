// Edge: source setup. May touch: source table. The form in which a source is kept, and the one in which it is shown.
import { SECRET_SETTINGS, type SourceInput, type SourceKind } from '#lib/domain/source-settings.ts';

/** A source as answers show it: without secrets, saying which are set. */
export interface SourceShown {
	id: string;
	name: string;
	kind: SourceKind;
	enabled: boolean;
	settings: Record<string, unknown>;
	/** Names of the secrets that are kept. */
	secretsSet: string[];
	contact: string | null;
	notes: string | null;
	version: number;
}

export interface SourceRow {
	id: string;
	site_id: number;
	name: string;
	kind: SourceKind;
	enabled: boolean;
	settings: Record<string, unknown>;
	secrets: Record<string, string>;
	contact: string | null;
	notes: string | null;
	version: number;
}

export const SOURCE_COLUMNS = 'id, site_id, name, kind, enabled, settings, secrets, contact, notes, version';

export function toShown(row: SourceRow): SourceShown {
	const { id, name, kind, enabled, settings, secrets, contact, notes, version } = row;
	return { id, name, kind, enabled, settings, secretsSet: Object.keys(secrets), contact, notes, version };
}

/** Parts settings into what may be shown and what may not. */
export function splitSecrets(settings: SourceInput['settings']): {
	open: Record<string, unknown>;
	secrets: Record<string, string>;
} {
	const open: Record<string, unknown> = {};
	const secrets: Record<string, string> = {};
	for (const [name, value] of Object.entries(settings)) {
		if (value === null || value === undefined) continue;
		if ((SECRET_SETTINGS as readonly string[]).includes(name)) secrets[name] = String(value);
		else open[name] = value;
	}
	return { open, secrets };
}
