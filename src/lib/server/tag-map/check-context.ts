// Edge: tag map. May touch: source, machine, tag, limit and reading tables; to read only.
import { sql } from 'drizzle-orm';
import { checkDraft, type CheckContext } from '#lib/domain/tag-map/check-draft.ts';
import type { DraftCheck } from '#lib/domain/tag-map/row.ts';
import type { SourceKind } from '#lib/domain/source-settings.ts';
import type { Db } from '#lib/server/db/pool.ts';
import { rowsToPublish, type Draft, type IdentifiedRow } from './find-map.ts';
import { unitRules } from './unit-rules.ts';

/** What the check must know of the site beside the rows. */
export async function findCheckContext(db: Db, siteId: number, convert: boolean): Promise<CheckContext> {
	const sources = await db.execute<{ name: string; kind: SourceKind; enabled: boolean; payload: 'json' | 'sparkplug' | null }>(
		sql`SELECT name, kind, enabled, settings->>'payload' AS payload FROM sources WHERE site_id = ${siteId} AND deleted_at IS NULL`,
	);
	const machines = await db.execute<{ name: string; area: string | null }>(
		sql`SELECT m.name, a.name AS area FROM machines m LEFT JOIN areas a ON a.id = m.area_id WHERE m.site_id = ${siteId} AND m.deleted_at IS NULL`,
	);
	const settled = await db.execute<{ id: number; unit: string; detector: string }>(
		sql`SELECT t.id, t.unit, t.detector FROM tags t
			WHERE t.site_id = ${siteId} AND t.published_at IS NOT NULL
			  AND (EXISTS (SELECT FROM latest l WHERE l.tag_id = t.id) OR EXISTS (SELECT FROM limits m WHERE m.tag_id = t.id AND m.to_revision IS NULL))`,
	);
	return {
		sources: new Map(sources.rows.map((source) => [source.name.toLowerCase(), source])),
		machineAreas: new Map(machines.rows.map((machine) => [machine.name.toLowerCase(), machine.area])),
		settled: new Map(settled.rows.map((tag) => [tag.id, { unit: tag.unit, detector: tag.detector }])),
		convert,
		units: unitRules,
	};
}

/** Checks rows as they would be published. */
export async function checkRows(
	db: Db,
	siteId: number,
	rows: readonly IdentifiedRow[],
	convert: boolean,
	version: number,
): Promise<DraftCheck> {
	return checkDraft(rows, await findCheckContext(db, siteId, convert), version);
}

/** Checks the draft as it stands. */
export async function checkFoundDraft(db: Db, siteId: number, draft: Draft): Promise<DraftCheck> {
	return checkRows(db, siteId, rowsToPublish(draft), draft.convert, draft.version);
}
