// Edge: tag map. May touch: area, machine and measuring-point tables.
import { sql } from 'drizzle-orm';
import type { MapRow } from '#lib/domain/tag-map/row.ts';
import type { Db } from '#lib/server/db/pool.ts';

/** Makes the areas, machines and measuring points that rows name and that are not there yet; an area is given to a machine that has none. */
export async function placeMachines(db: Db, siteId: number, rows: readonly MapRow[]): Promise<void> {
	const named = rows.filter((row) => row.machine || row.area);
	if (named.length === 0) return;
	const json = JSON.stringify(
		named.map((row) => ({ area: row.area ?? null, machine: row.machine ?? null, point: row.point ?? null })),
	);
	const given = sql`jsonb_to_recordset(${json}::jsonb) AS given(area text, machine text, point text)`;
	await db.execute(
		sql`INSERT INTO areas (site_id, name) SELECT DISTINCT ON (lower(area)) ${siteId}::int, area FROM ${given} WHERE area IS NOT NULL
			ON CONFLICT DO NOTHING`,
	);
	await db.execute(
		sql`INSERT INTO machines (site_id, area_id, name)
			SELECT DISTINCT ON (lower(machine)) ${siteId}::int, a.id, machine FROM ${given}
			LEFT JOIN areas a ON a.site_id = ${siteId} AND lower(a.name) = lower(given.area)
			WHERE machine IS NOT NULL ORDER BY lower(machine), a.id NULLS LAST
			ON CONFLICT DO NOTHING`,
	);
	await db.execute(
		sql`UPDATE machines m SET area_id = a.id, version = m.version + 1 FROM ${given}
			JOIN areas a ON a.site_id = ${siteId} AND lower(a.name) = lower(given.area)
			WHERE m.site_id = ${siteId} AND m.deleted_at IS NULL AND lower(m.name) = lower(given.machine) AND m.area_id IS NULL`,
	);
	await db.execute(
		sql`INSERT INTO measuring_points (machine_id, name)
			SELECT DISTINCT m.id, given.point FROM ${given}
			JOIN machines m ON m.site_id = ${siteId} AND m.deleted_at IS NULL AND lower(m.name) = lower(given.machine)
			WHERE given.point IS NOT NULL
			ON CONFLICT DO NOTHING`,
	);
}
