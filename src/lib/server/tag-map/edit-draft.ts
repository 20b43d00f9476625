// Edge: tag map. May touch: tag and draft tables.
import { sql } from 'drizzle-orm';
import { ok, refuse, type Outcome } from '#lib/domain/outcome.ts';
import { changedFields, tidyRow } from '#lib/domain/tag-map/draft.ts';
import type { DraftCheck, MapRow } from '#lib/domain/tag-map/row.ts';
import type { Db, Pool } from '#lib/server/db/pool.ts';
import { inTransaction } from '#lib/server/db/transaction.ts';
import { checkFoundDraft } from './check-context.ts';
import { findDraft, type Draft } from './find-map.ts';

/** A row as sent: its version when the sender read it, or a removal. */
export type SentRow = Partial<MapRow> & { tag?: string; row_version?: number; delete?: boolean };

/** A row that somebody else changed meanwhile: theirs and the one that was sent. */
export interface RowConflict {
	tag: string;
	sent_version: number;
	current_version: number;
	sent: SentRow;
	current: MapRow | null;
}

export interface DraftEdit {
	siteId: number;
	/** `replace` removes what is not sent; `merge` touches only what is sent. */
	mode: 'replace' | 'merge';
	rows: readonly SentRow[];
	/** The version the sender saw, from If-Match; null when not given. */
	ifVersion: number | null;
	convert?: boolean;
	by: string;
}

export type DraftAnswer = { check: DraftCheck; draft: Draft };
type DraftRefusal = 'draft-changed' | 'row-changed' | 'unknown-row' | 'tag-missing';

/** Thrown inside the transaction to roll it back; becomes the refusal. */
class EditRefused extends Error {
	readonly reason: DraftRefusal;
	readonly conflicts: RowConflict[];
	constructor(reason: DraftRefusal, detail: string, conflicts: RowConflict[] = []) {
		super(detail);
		this.reason = reason;
		this.conflicts = conflicts;
	}
}

/**
 * Saves rows into the site's draft, in error or not, and answers the check.
 * Refusals: 'draft-changed' (If-Match does not fit), 'row-changed' (with both versions), 'unknown-row' (an id that is not this site's), 'tag-missing'.
 */
export async function editDraft(
	pool: Pool,
	edit: DraftEdit,
): Promise<Outcome<DraftAnswer, DraftRefusal> | { ok: false; reason: 'row-changed'; detail: string; conflicts: RowConflict[] }> {
	try {
		return ok(await inTransaction(pool, (db) => applyEdit(db, edit)));
	} catch (error) {
		if (!(error instanceof EditRefused)) throw error;
		if (error.reason === 'row-changed')
			return { ok: false, reason: 'row-changed', detail: error.message, conflicts: error.conflicts };
		return refuse(error.reason, error.message);
	}
}

async function applyEdit(db: Db, edit: DraftEdit): Promise<DraftAnswer> {
	const { siteId, by } = edit;
	await db.execute(
		sql`INSERT INTO map_drafts (site_id, version, updated_by) VALUES (${siteId}, 0, ${by}) ON CONFLICT DO NOTHING`,
	);
	await db.execute(sql`SELECT 1 FROM map_drafts WHERE site_id = ${siteId} FOR UPDATE`);
	const before = await findDraft(db, siteId);
	if (edit.ifVersion !== null && edit.ifVersion !== before.version) {
		throw new EditRefused('draft-changed', `the draft is at version ${before.version}, you saw ${edit.ifVersion}`);
	}
	const version = before.version + 1;
	const byId = new Map(before.rows.map((row) => [row.id, row]));
	const byName = new Map(before.rows.filter((row) => row.state !== 'removed').map((row) => [row.row.tag.toLowerCase(), row]));
	const published = new Map<number, MapRow>();
	const publishedRows = await db.execute<{ id: number; row: MapRow }>(
		sql`SELECT tag_id AS id, row FROM map_rows WHERE site_id = ${siteId} AND to_revision IS NULL`,
	);
	for (const { id, row } of publishedRows.rows) published.set(id, row);

	const conflicts: RowConflict[] = [];
	const touched = new Map<number, MapRow | null>();
	const fresh: MapRow[] = [];
	for (const sent of edit.rows) {
		const { row_version: sentVersion, delete: isRemoval, ...fields } = sent;
		const current = fields.id != null ? byId.get(fields.id) : byName.get((fields.tag ?? '').trim().toLowerCase());
		if (fields.id != null && !current) throw new EditRefused('unknown-row', `no row with id ${fields.id} in this draft`);
		if (sentVersion !== undefined && current && sentVersion !== current.rowVersion) {
			conflicts.push({
				tag: current.row.tag,
				sent_version: sentVersion,
				current_version: current.rowVersion,
				sent,
				current: current.state === 'removed' ? null : current.row,
			});
			continue;
		}
		if (isRemoval) {
			if (!current) throw new EditRefused('unknown-row', `no row named "${fields.tag ?? ''}" in this draft`);
			touched.set(current.id, null);
			continue;
		}
		const base: Partial<MapRow> = edit.mode === 'merge' && current && current.state !== 'removed' ? current.row : {};
		const merged = tidyRow({ ...base, ...fields, tag: fields.tag ?? base.tag ?? '' } as MapRow);
		if (current) touched.set(current.id, merged);
		else if (merged.tag === '') throw new EditRefused('tag-missing', 'a new row needs its tag name');
		else fresh.push(merged);
	}
	if (conflicts.length > 0) {
		throw new EditRefused(
			'row-changed',
			`${conflicts.length} ${conflicts.length === 1 ? 'row was' : 'rows were'} changed by somebody else`,
			conflicts,
		);
	}
	for (const { id, row } of await identify(db, siteId, fresh, published)) touched.set(id, row);
	if (edit.mode === 'replace') for (const row of before.rows) if (!touched.has(row.id)) touched.set(row.id, null);

	await saveRows(db, siteId, touched, published, version, by);
	await db.execute(
		sql`UPDATE map_drafts SET version = ${version}, updated_at = now(), updated_by = ${by},
			convert = ${edit.convert ?? before.convert} WHERE site_id = ${siteId}`,
	);
	const draft = await findDraft(db, siteId);
	return { draft, check: await checkFoundDraft(db, siteId, draft) };
}

/** Gives new rows their tag's id for life: the retired tag of the same name, quantity and unit goes on, otherwise a new one begins. */
async function identify(
	db: Db,
	siteId: number,
	rows: readonly MapRow[],
	published: ReadonlyMap<number, MapRow>,
): Promise<{ id: number; row: MapRow }[]> {
	if (rows.length === 0) return [];
	const retired = await db.execute<{ id: number; name: string; unit: string; quantity: string | null }>(
		sql`SELECT id, name, unit, quantity FROM tags WHERE site_id = ${siteId} AND retired_at IS NOT NULL
			AND lower(name) = ANY(${sql.param(rows.map((row) => row.tag.toLowerCase()))}::text[]) ORDER BY retired_at`,
	);
	const byName = new Map(retired.rows.map((tag) => [tag.name.toLowerCase(), tag]));
	const taken = new Set<number>();
	const found: ({ id: number; row: MapRow } | null)[] = rows.map((row) => {
		const old = byName.get(row.tag.toLowerCase());
		if (!old || taken.has(old.id) || published.has(old.id)) return null;
		if (old.unit !== row.unit || (old.quantity ?? null) !== (row.quantity ?? null)) return null;
		taken.add(old.id);
		return { id: old.id, row };
	});
	const missing = rows.filter((_, i) => found[i] === null);
	const made = await db.execute<{ id: number }>(
		sql`INSERT INTO tags (site_id, name) SELECT ${siteId}, name
			FROM unnest(${sql.param(missing.map((row) => row.tag))}::text[]) WITH ORDINALITY AS given(name, place) ORDER BY place RETURNING id`,
	);
	let next = 0;
	return rows.map((row, i) => found[i] ?? { id: made.rows[next++]?.id ?? 0, row });
}

/** Writes only what differs from the published map; a row edited back to what is published leaves the draft. */
async function saveRows(
	db: Db,
	siteId: number,
	touched: ReadonlyMap<number, MapRow | null>,
	published: ReadonlyMap<number, MapRow>,
	version: number,
	by: string,
): Promise<void> {
	const same: number[] = [];
	const different: { id: number; row: MapRow | null }[] = [];
	for (const [id, row] of touched) {
		const was = published.get(id);
		if (row === null ? was === undefined : was !== undefined && changedFields(was, row).length === 0) same.push(id);
		else different.push({ id, row });
	}
	if (same.length > 0) {
		await db.execute(sql`DELETE FROM draft_rows WHERE site_id = ${siteId} AND tag_id = ANY(${sql.param(same)}::int[])`);
	}
	if (different.length === 0) return;
	const json = JSON.stringify(
		different.map(({ id, row }) => ({ tag_id: id, row: row === null ? null : { ...row, id: undefined } })),
	);
	await db.execute(
		sql`INSERT INTO draft_rows (site_id, tag_id, row, row_version, updated_by)
			SELECT ${siteId}, given.tag_id, nullif(given.row, 'null'::jsonb), ${version}, ${by}
			FROM jsonb_to_recordset(${json}::jsonb) AS given(tag_id int, row jsonb)
			ON CONFLICT (site_id, tag_id) DO UPDATE SET row = excluded.row, row_version = excluded.row_version,
				updated_by = excluded.updated_by, updated_at = now()`,
	);
}

/** Throws the draft away; what was published stands. */
export async function discardDraft(pool: Pool, siteId: number, by: string): Promise<number> {
	return inTransaction(pool, async (db) => {
		const gone = await db.execute(sql`DELETE FROM draft_rows WHERE site_id = ${siteId}`);
		await db.execute(
			sql`UPDATE map_drafts SET version = version + 1, convert = false, updated_at = now(), updated_by = ${by} WHERE site_id = ${siteId}`,
		);
		return gone.rowCount ?? 0;
	});
}
