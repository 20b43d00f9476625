// Edge: tag map. May touch: tag, draft and revision tables.
import { sql } from 'drizzle-orm';
import type { MapRow } from '#lib/domain/tag-map/row.ts';
import type { DraftRow } from '#lib/domain/tag-map/draft.ts';
import type { Db } from '#lib/server/db/pool.ts';

/** A published or drafted row with its tag's id. */
export type IdentifiedRow = MapRow & { id: number };

/** The published map, in the order of the tags' ids. */
export async function findPublishedRows(db: Db, siteId: number): Promise<IdentifiedRow[]> {
	const found = await db.execute<{ id: number; row: MapRow }>(
		sql`SELECT tag_id AS id, row FROM map_rows WHERE site_id = ${siteId} AND to_revision IS NULL ORDER BY tag_id`,
	);
	return found.rows.map(({ id, row }) => ({ ...row, id }));
}

/** The map as it stood in a revision. */
export async function findRevisionRows(db: Db, siteId: number, revision: number): Promise<IdentifiedRow[]> {
	const found = await db.execute<{ id: number; row: MapRow }>(
		sql`SELECT tag_id AS id, row FROM map_rows
			WHERE site_id = ${siteId} AND from_revision <= ${revision} AND (to_revision IS NULL OR to_revision > ${revision})
			ORDER BY tag_id`,
	);
	return found.rows.map(({ id, row }) => ({ ...row, id }));
}

/** Number of the newest revision; 0 before the first publish. */
export async function findRevision(db: Db, siteId: number): Promise<number> {
	const found = await db.execute<{ revision: number }>(
		sql`SELECT coalesce(max(revision), 0)::int AS revision FROM map_revisions WHERE site_id = ${siteId}`,
	);
	return found.rows[0]?.revision ?? 0;
}

export interface Draft {
	version: number;
	/** Revision that is published now, which the draft is shown against. */
	revision: number;
	convert: boolean;
	/** Rows of the map as the draft would have it, with removed ones marked. */
	rows: DraftRow[];
	/** How many rows differ from the published map. */
	changes: number;
	updatedAt: Date | null;
	updatedBy: string | null;
}

/**
 * The draft of a site: the published map with the draft's differences laid over it.
 * `rowVersion` is the negative revision for a published row and the draft's version of the change for a changed one, so that no two states share one.
 */
export async function findDraft(db: Db, siteId: number): Promise<Draft> {
	const head = await db.execute<{ version: number; convert: boolean; updated_at: Date; updated_by: string | null }>(
		sql`SELECT version, convert, updated_at, updated_by FROM map_drafts WHERE site_id = ${siteId}`,
	);
	const merged = await db.execute<{ id: number; row: MapRow | null; drafted: MapRow | null; changed: boolean; version: number }>(
		sql`SELECT coalesce(p.tag_id, d.tag_id) AS id, p.row, d.row AS drafted, d.tag_id IS NOT NULL AS changed,
				coalesce(d.row_version, -p.from_revision) AS version
			FROM (SELECT tag_id, row, from_revision FROM map_rows WHERE site_id = ${siteId} AND to_revision IS NULL) p
			FULL JOIN (SELECT tag_id, row, row_version FROM draft_rows WHERE site_id = ${siteId}) d USING (tag_id)
			ORDER BY 1`,
	);
	let changes = 0;
	const rows = merged.rows.flatMap(({ id, row, drafted, changed, version }): DraftRow[] => {
		const shown = changed ? (drafted ?? row) : row;
		if (!shown) return []; // added and removed again within the draft
		const state = !changed ? 'published' : drafted === null ? 'removed' : row === null ? 'added' : 'changed';
		if (state !== 'published') changes += 1;
		return [{ id, row: { ...shown, id }, rowVersion: version, state }];
	});
	const draft = head.rows[0];
	return {
		version: draft?.version ?? 0,
		revision: await findRevision(db, siteId),
		convert: draft?.convert ?? false,
		rows,
		changes,
		updatedAt: draft ? new Date(draft.updated_at) : null,
		updatedBy: draft?.updated_by ?? null,
	};
}

/** Rows that a publish of this draft would leave. */
export function rowsToPublish(draft: Draft): IdentifiedRow[] {
	return draft.rows.filter((row) => row.state !== 'removed').map((row) => ({ ...row.row, id: row.id }));
}
