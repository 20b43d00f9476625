// Edge: tag map. May touch: limit tables.
import { sql } from 'drizzle-orm';
import type { MapDiff } from '#lib/domain/tag-map/diff.ts';
import type { Detector, MapRow } from '#lib/domain/tag-map/row.ts';
import type { Db } from '#lib/server/db/pool.ts';
import { conversionBetween } from './unit-rules.ts';

/**
 * Where a draft changes the unit or detector of tags with limits, converts those limits in the same transaction, as a limit revision of their own.
 * Deadbands and sigmas are differences: they convert without the offset.
 */
export async function convertSettledTags(
	db: Db,
	siteId: number,
	diff: MapDiff,
	{ revision, by, convert }: { revision: number; by: string; convert: boolean },
): Promise<void> {
	const moved = diff.changed.filter(
		({ before, after }) => before.unit !== after.unit || detectorOf(before) !== detectorOf(after),
	);
	if (!convert || moved.length === 0) return;
	const factors = new Map<number, { factor: number; offset: number }>();
	for (const { id, before, after } of moved) {
		const line = conversionBetween(
			{ unit: before.unit ?? '1', detector: detectorOf(before) },
			{ unit: after.unit ?? '1', detector: detectorOf(after) },
			after.frequency_hz ?? null,
		);
		if (line) factors.set(id, line);
	}
	const found = await db.execute<{
		id: number;
		tag_id: number;
		kind: string;
		value: number | null;
		deadband: number;
		baseline: { mean: number; sigma: number } | null;
	}>(
		sql`SELECT id, tag_id, kind, value, deadband, baseline FROM limits WHERE to_revision IS NULL AND tag_id = ANY(${sql.param([...factors.keys()])}::int[])`,
	);
	if (found.rows.length === 0) return;
	const next = await db.execute<{ revision: number }>(
		sql`INSERT INTO limit_revisions (site_id, revision, saved_by, note)
			SELECT ${siteId}, coalesce(max(revision), 0) + 1, ${by}, ${`converted with map revision ${revision}`} FROM limit_revisions WHERE site_id = ${siteId}
			RETURNING revision`,
	);
	const limitRevision = next.rows[0]?.revision ?? 1;
	for (const limit of found.rows) {
		const line = factors.get(limit.tag_id);
		if (!line) continue;
		const absolute = (x: number) => x * line.factor + line.offset;
		const value =
			limit.value === null
				? null
				: limit.kind === 'high' || limit.kind === 'low'
					? absolute(limit.value)
					: limit.kind === 'rate'
						? limit.value * line.factor
						: limit.value;
		const baseline = limit.baseline
			? { ...limit.baseline, mean: absolute(limit.baseline.mean), sigma: limit.baseline.sigma * Math.abs(line.factor) }
			: null;
		await db.execute(
			sql`INSERT INTO limits (site_id, tag_id, kind, level, value, deadband, raise_after_s, clear_after_s, window_s, baseline, state, origin, note, cause,
					consequence, response, respond_within_s, from_revision)
				SELECT site_id, tag_id, kind, level, ${value}::float8, ${limit.deadband * Math.abs(line.factor)}, raise_after_s, clear_after_s, window_s,
					${baseline === null ? null : JSON.stringify(baseline)}::jsonb, state, origin, note, cause, consequence, response, respond_within_s, ${limitRevision}
				FROM limits WHERE id = ${limit.id}`,
		);
		await db.execute(sql`UPDATE limits SET to_revision = ${limitRevision} WHERE id = ${limit.id}`);
	}
}

function detectorOf(row: MapRow): Detector {
	return (row.detector || 'none') as Detector;
}
