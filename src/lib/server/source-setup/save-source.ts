// Edge: source setup. May touch: source table, audit, NOTIFY.
import {
	modbusSettings,
	mqttSettings,
	opcuaSettings,
	sourceInput,
	type ModbusSettings,
	type SourceInput,
} from '#lib/domain/source-settings.ts';
import { ok, refuse, type Outcome } from '#lib/domain/outcome.ts';
import { recordAudit, type AuditActor } from '#lib/server/audit/record.ts';
import { createDb, type Client, type Pool } from '#lib/server/db/pool.ts';
import { inTransaction } from '#lib/server/db/transaction.ts';
import { SOURCE_COLUMNS, splitSecrets, toShown, type SourceRow, type SourceShown } from './source-record.ts';

export interface Caller {
	siteId: number;
	actor: AuditActor;
	ip: string | null;
}

/** What a change of a source may name; settings given are laid over those that stand, null takes one away. */
export interface SourceChange {
	name?: string | undefined;
	enabled?: boolean | undefined;
	contact?: string | null | undefined;
	notes?: string | null | undefined;
	settings?: Record<string, unknown> | undefined;
	version?: number | undefined;
}

type Taken = 'name-taken' | 'address-taken';
export type SettingsFault = { ok: false; reason: 'settings'; issues: { path: PropertyKey[]; message: string }[] };

const SETTINGS = { opcua: opcuaSettings, modbus: modbusSettings, mqtt: mqttSettings } as const;

/** Creates a source. Refuses 'name-taken', and 'address-taken' for a second enabled Modbus source with one host and port. */
export async function createSource(pool: Pool, input: SourceInput, caller: Caller): Promise<Outcome<SourceShown, Taken>> {
	return inTransaction(pool, async (_, client) => {
		const taken = await findTaken(client, caller.siteId, null, input);
		if (taken) return taken;
		const { open, secrets } = splitSecrets(input.settings);
		const made = await client.query<SourceRow>(
			`INSERT INTO sources (site_id, name, kind, enabled, settings, secrets, contact, notes) VALUES ($1, $2, $3, $4, $5, $6, $7, $8) RETURNING ${SOURCE_COLUMNS}`,
			[
				caller.siteId,
				input.name,
				input.kind,
				input.enabled,
				JSON.stringify(open),
				JSON.stringify(secrets),
				input.contact ?? null,
				input.notes ?? null,
			],
		);
		const row = made.rows[0];
		if (!row) throw new Error('a source just made is not there');
		await finish(client, caller, 'source.created', null, row);
		return ok(toShown(row));
	});
}

/** Changes a source; secrets not sent stay. Refuses 'not-found', 'stale', 'name-taken', 'address-taken', and 'settings' with each that is wrong. */
export async function updateSource(
	pool: Pool,
	id: string,
	change: SourceChange,
	caller: Caller,
): Promise<Outcome<SourceShown, Taken | 'not-found' | 'stale'> | SettingsFault> {
	return inTransaction(pool, async (_, client) => {
		const found = await client.query<SourceRow>(
			`SELECT ${SOURCE_COLUMNS} FROM sources WHERE id = $1 AND site_id = $2 AND deleted_at IS NULL FOR UPDATE`,
			[id, caller.siteId],
		);
		const before = found.rows[0];
		if (!before) return refuse('not-found');
		if (change.version !== undefined && change.version !== before.version)
			return refuse('stale', `the source is at version ${before.version}, you saw ${change.version}`);
		const merged = { ...before.settings, ...before.secrets, ...change.settings };
		const parsed = SETTINGS[before.kind].safeParse(
			Object.fromEntries(Object.entries(merged).filter(([, value]) => value !== null)),
		);
		if (!parsed.success)
			return {
				ok: false,
				reason: 'settings',
				issues: parsed.error.issues.map((issue) => ({ path: ['settings', ...issue.path], message: issue.message })),
			};
		const after = sourceInput.parse({
			kind: before.kind,
			name: change.name ?? before.name,
			enabled: change.enabled ?? before.enabled,
			contact: change.contact === undefined ? before.contact : change.contact,
			notes: change.notes === undefined ? before.notes : change.notes,
			settings: parsed.data,
		});
		const taken = await findTaken(client, caller.siteId, id, after);
		if (taken) return taken;
		const { open, secrets } = splitSecrets(after.settings);
		const saved = await client.query<SourceRow>(
			`UPDATE sources SET name = $2, enabled = $3, settings = $4, secrets = $5, contact = $6, notes = $7, version = version + 1, updated_at = now() WHERE id = $1 RETURNING ${SOURCE_COLUMNS}`,
			[id, after.name, after.enabled, JSON.stringify(open), JSON.stringify(secrets), after.contact ?? null, after.notes ?? null],
		);
		const row = saved.rows[0];
		if (!row) throw new Error('a source just changed is not there');
		if (row.name !== before.name) await renameInMap(client, caller.siteId, before.name, row.name);
		await finish(client, caller, 'source.changed', before, row);
		return ok(toShown(row));
	});
}

/** Removes a source that no published tag reads. Refuses 'not-found', and 'in-use' with the count. */
export async function deleteSource(pool: Pool, id: string, caller: Caller): Promise<Outcome<null, 'not-found' | 'in-use'>> {
	return inTransaction(pool, async (_, client) => {
		const found = await client.query<SourceRow & { tags: number }>(
			`SELECT ${SOURCE_COLUMNS}, (SELECT count(*)::int FROM tags t WHERE t.source_id = s.id AND t.published_at IS NOT NULL AND t.retired_at IS NULL) AS tags
			 FROM sources s WHERE id = $1 AND site_id = $2 AND deleted_at IS NULL FOR UPDATE`,
			[id, caller.siteId],
		);
		const before = found.rows[0];
		if (!before) return refuse('not-found');
		if (before.tags > 0) return refuse('in-use', `${before.tags} published ${before.tags === 1 ? 'tag reads' : 'tags read'} it`);
		await client.query('UPDATE sources SET deleted_at = now(), enabled = false, version = version + 1 WHERE id = $1', [id]);
		await client.query('UPDATE alarms SET cleared_at = now(), level_now = NULL WHERE source_id = $1 AND cleared_at IS NULL', [
			id,
		]);
		await finish(client, caller, 'source.deleted', before, null);
		return ok(null);
	});
}

async function finish(
	client: Client,
	caller: Caller,
	action: string,
	before: SourceRow | null,
	after: SourceRow | null,
): Promise<void> {
	const subject = after ?? before;
	await recordAudit(createDb(client), {
		...caller,
		action,
		subjectKind: 'source',
		subjectId: subject?.id ?? null,
		subjectName: subject?.name ?? null,
		before: before ? toShown(before) : null,
		after: after ? toShown(after) : null,
	});
	await client.query("SELECT pg_notify('millrace_sources', $1)", [String(caller.siteId)]);
}

async function findTaken(
	client: Client,
	siteId: number,
	id: string | null,
	input: SourceInput,
): Promise<{ ok: false; reason: Taken; detail?: string } | null> {
	const named = await client.query(
		'SELECT 1 FROM sources WHERE site_id = $1 AND lower(name) = lower($2) AND deleted_at IS NULL AND id IS DISTINCT FROM $3::uuid',
		[siteId, input.name, id],
	);
	if ((named.rowCount ?? 0) > 0) return refuse('name-taken', `this site has a source named "${input.name}" already`);
	if (input.kind !== 'modbus' || !input.enabled) return null;
	const { host, port } = input.settings as ModbusSettings;
	if (!host) return null;
	const other = await client.query<{ name: string }>(
		`SELECT name FROM sources WHERE kind = 'modbus' AND enabled AND deleted_at IS NULL AND id IS DISTINCT FROM $3::uuid
			AND lower(settings->>'host') = lower($1) AND coalesce((settings->>'port')::int, 502) = $2 ORDER BY created_at LIMIT 1`,
		[host, port ?? 502, id],
	);
	const first = other.rows[0];
	return first
		? refuse(
				'address-taken',
				`"${first.name}" already reads ${host}, port ${port ?? 502}; a device may allow one connection only`,
			)
		: null;
}

/** Rows name their source; a rename is carried into the published map and the draft, as the same revision. */
async function renameInMap(client: Client, siteId: number, from: string, to: string): Promise<void> {
	for (const table of ['map_rows', 'draft_rows', 'tags']) {
		await client.query(
			`UPDATE ${table} SET row = jsonb_set(row, '{source}', to_jsonb($3::text)) WHERE site_id = $1 AND lower(row->>'source') = lower($2)`,
			[siteId, from, to],
		);
	}
}
