// Edge: tag map. May touch: tag, draft, revision, machine, limit and reading-latest tables; NOTIFY on publish only.
import { sql } from 'drizzle-orm';
import { ok, refuse, type Outcome } from '#lib/domain/outcome.ts';
import { changedFields } from '#lib/domain/tag-map/draft.ts';
import { diffMaps, publishCounts, type MapDiff } from '#lib/domain/tag-map/diff.ts';
import type { DraftCheck, MapRow } from '#lib/domain/tag-map/row.ts';
import { recordAudit, type AuditActor } from '#lib/server/audit/record.ts';
import type { Client, Db, Pool } from '#lib/server/db/pool.ts';
import { inTransaction } from '#lib/server/db/transaction.ts';
import { checkRows } from './check-context.ts';
import { convertSettledTags } from './convert-limits.ts';
import { findDraft, findPublishedRows, findRevision, findRevisionRows, rowsToPublish, type IdentifiedRow } from './find-map.ts';
import { placeMachines } from './place-machines.ts';
import { tellFeed } from './tell-feed.ts';

export interface Published {
	revision: number;
	started: number;
	stopped: number;
	changed: number;
}

export interface PublishRequest {
	siteId: number;
	note: string;
	/** Version of the draft that the publisher saw; absent: whatever it is. */
	version?: number | undefined;
	actor: AuditActor;
	ip: string | null;
}

type PublishRefusal = 'draft-changed' | 'has-errors' | 'nothing-to-publish';
type PublishAnswer = Outcome<Published, PublishRefusal> | { ok: false; reason: 'has-errors'; detail: string; check: DraftCheck };

/**
 * Makes the draft the next revision, which collectors take up within 2 s.
 * Refusals: 'draft-changed' when it is not the version seen, 'has-errors' with the check, 'nothing-to-publish'.
 */
export async function publishDraft(pool: Pool, request: PublishRequest): Promise<PublishAnswer> {
	return inTransaction(pool, async (db, client) => {
		await lockDraft(db, request.siteId);
		const draft = await findDraft(db, request.siteId);
		if (request.version !== undefined && request.version !== draft.version) {
			return refuse('draft-changed', `the draft is at version ${draft.version}, you saw ${request.version}`);
		}
		if (draft.changes === 0) return refuse('nothing-to-publish', 'the draft does not differ from the published map');
		return publishRows(db, client, request, rowsToPublish(draft), draft.convert, draft.version, null);
	});
}

/** Publishes an earlier revision's rows as a new one; the draft stays as it is. Refuses like `publishDraft`, and 'unknown-revision'. */
export async function restoreRevision(
	pool: Pool,
	request: Omit<PublishRequest, 'version'> & { revision: number; convert: boolean },
): Promise<PublishAnswer | { ok: false; reason: 'unknown-revision'; detail: string }> {
	return inTransaction(pool, async (db, client) => {
		await lockDraft(db, request.siteId);
		if (request.revision < 1 || request.revision > (await findRevision(db, request.siteId))) {
			return { ok: false as const, reason: 'unknown-revision' as const, detail: `there is no revision ${request.revision}` };
		}
		const rows = await findRevisionRows(db, request.siteId, request.revision);
		return publishRows(db, client, request, rows, request.convert, 0, request.revision);
	});
}

async function lockDraft(db: Db, siteId: number): Promise<void> {
	await db.execute(sql`INSERT INTO map_drafts (site_id, version) VALUES (${siteId}, 0) ON CONFLICT DO NOTHING`);
	await db.execute(sql`SELECT 1 FROM map_drafts WHERE site_id = ${siteId} FOR UPDATE`);
}

async function publishRows(
	db: Db,
	client: Client,
	request: PublishRequest,
	rows: IdentifiedRow[],
	convert: boolean,
	version: number,
	restoredFrom: number | null,
): Promise<PublishAnswer> {
	const { siteId, actor } = request;
	const check = await checkRows(db, siteId, rows, convert, version);
	if (check.errors.length > 0) {
		return { ok: false, reason: 'has-errors', detail: `${check.errors.length} rows in error; nothing was published`, check };
	}
	const before = await findPublishedRows(db, siteId);
	const diff = diffMaps(before, rows);
	if (diff.added.length + diff.removed.length + diff.changed.length === 0) {
		return refuse('nothing-to-publish', 'this would change nothing');
	}
	const counts = publishCounts(diff);
	const revision = (await findRevision(db, siteId)) + 1;
	await db.execute(
		sql`INSERT INTO map_revisions (site_id, revision, published_by, note, started, stopped, changed, restored_from)
			VALUES (${siteId}, ${revision}, ${actor.name}, ${request.note}, ${counts.started}, ${counts.stopped}, ${counts.changed}, ${restoredFrom})`,
	);
	const touched = [...diff.added, ...diff.changed.map((change) => change.after)];
	await db.execute(
		sql`UPDATE map_rows SET to_revision = ${revision} WHERE site_id = ${siteId} AND to_revision IS NULL
			AND tag_id = ANY(${sql.param([...diff.removed.map((row) => row.id), ...diff.changed.map((change) => change.id)])}::int[])`,
	);
	const json = JSON.stringify(touched.map((row) => ({ id: row.id, row: { ...row, id: undefined } })));
	await db.execute(
		sql`INSERT INTO map_rows (site_id, tag_id, from_revision, row)
			SELECT ${siteId}, given.id, ${revision}, given.row FROM jsonb_to_recordset(${json}::jsonb) AS given(id int, row jsonb)`,
	);
	await placeMachines(db, siteId, touched);
	await convertSettledTags(db, siteId, diff, { revision, by: actor.name, convert });
	await updateTags(db, siteId, diff, touched, revision);
	// Rows that the draft now shares with the published map are no longer differences.
	if (restoredFrom === null) await db.execute(sql`DELETE FROM draft_rows WHERE site_id = ${siteId}`);
	else await dropSettledDraftRows(db, siteId);
	await db.execute(
		sql`UPDATE map_drafts SET version = version + 1, base_revision = ${revision}, convert = false, updated_at = now(), updated_by = ${actor.name} WHERE site_id = ${siteId}`,
	);
	await recordAudit(db, {
		siteId,
		actor,
		ip: request.ip,
		action: restoredFrom === null ? 'map.published' : 'map.restored',
		subjectKind: 'map',
		subjectId: revision,
		subjectName: `revision ${revision}`,
		before: summary(diff, 'before'),
		after: { ...summary(diff, 'after'), ...counts, ...(restoredFrom === null ? {} : { restored_from: restoredFrom }) },
		note: request.note || null,
	});
	await tellFeed(client, siteId, diff);
	await db.execute(sql`SELECT pg_notify('millrace_map', ${String(siteId)})`);
	return ok({ revision, ...counts });
}

/** Rows with what changed in them, at most 200, so that an audit entry of a large import stays readable. */
function summary(diff: MapDiff, side: 'before' | 'after'): Record<string, unknown> {
	const pick = (row: MapRow, fields: readonly (keyof MapRow)[]) =>
		Object.fromEntries(fields.map((field) => [field, row[field] ?? null]));
	return {
		rows: diff.changed.slice(0, 200).map((change) => ({ tag: change.before.tag, ...pick(change[side], change.fields) })),
		...(side === 'before'
			? { removed: diff.removed.slice(0, 200).map((row) => row.tag) }
			: { added: diff.added.slice(0, 200).map((row) => row.tag) }),
	};
}

async function updateTags(
	db: Db,
	siteId: number,
	diff: MapDiff,
	touched: readonly IdentifiedRow[],
	revision: number,
): Promise<void> {
	const unitChanged = new Set(
		diff.changed
			.filter(({ before, after }) => before.unit !== after.unit || (before.detector ?? 'none') !== (after.detector ?? 'none'))
			.map((change) => change.id),
	);
	const renamed = diff.changed.filter(({ before, after }) => before.tag !== after.tag).map((change) => change.id);
	await db.execute(
		sql`UPDATE tags SET retired_at = now(), revision = ${revision} WHERE site_id = ${siteId} AND id = ANY(${sql.param(diff.removed.map((row) => row.id))}::int[])`,
	);
	// Two tags may swap their names: a step in between keeps the unique index content.
	await db.execute(sql`UPDATE tags SET name = '~' || id WHERE id = ANY(${sql.param(renamed)}::int[])`);
	const json = JSON.stringify(
		touched.map((row) => ({
			id: row.id,
			name: row.tag,
			unit: row.unit,
			detector: row.detector ?? 'none',
			quantity: row.quantity ?? null,
			source: (row.source ?? '').toLowerCase(),
			machine: row.machine?.toLowerCase() ?? null,
			point: row.point?.toLowerCase() ?? null,
			unit_changed: unitChanged.has(row.id),
			row,
		})),
	);
	await db.execute(
		sql`UPDATE tags t SET name = given.name, unit = given.unit, detector = given.detector, quantity = given.quantity,
				source_id = s.id, machine_id = m.id, point_id = p.id, row = given.row, revision = ${revision},
				unit_revision = CASE WHEN given.unit_changed OR t.published_at IS NULL THEN ${revision} ELSE t.unit_revision END,
				published_at = coalesce(t.published_at, now()), retired_at = NULL
			FROM jsonb_to_recordset(${json}::jsonb)
				AS given(id int, name text, unit text, detector text, quantity text, source text, machine text, point text, unit_changed boolean, row jsonb)
			LEFT JOIN sources s ON s.site_id = ${siteId} AND lower(s.name) = given.source AND s.deleted_at IS NULL
			LEFT JOIN machines m ON m.site_id = ${siteId} AND lower(m.name) = given.machine AND m.deleted_at IS NULL
			LEFT JOIN measuring_points p ON p.machine_id = m.id AND lower(p.name) = given.point
			WHERE t.id = given.id`,
	);
	// A value in the old unit must not be shown with the new one.
	await db.execute(
		sql`DELETE FROM latest WHERE tag_id = ANY(${sql.param([...unitChanged, ...diff.removed.map((row) => row.id)])}::int[])`,
	);
	await db.execute(sql`DELETE FROM judging_states WHERE tag_id = ANY(${sql.param([...unitChanged])}::int[])`);
}

async function dropSettledDraftRows(db: Db, siteId: number): Promise<void> {
	const found = await db.execute<{ id: number; drafted: MapRow | null; row: MapRow | null }>(
		sql`SELECT d.tag_id AS id, d.row AS drafted, p.row FROM draft_rows d
			LEFT JOIN map_rows p ON p.site_id = d.site_id AND p.tag_id = d.tag_id AND p.to_revision IS NULL WHERE d.site_id = ${siteId}`,
	);
	const settled = found.rows
		.filter(({ drafted, row }) => (drafted === null ? row === null : row !== null && changedFields(row, drafted).length === 0))
		.map(({ id }) => id);
	if (settled.length > 0)
		await db.execute(sql`DELETE FROM draft_rows WHERE site_id = ${siteId} AND tag_id = ANY(${sql.param(settled)}::int[])`);
}
