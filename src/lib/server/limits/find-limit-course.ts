// Edge: limits. May touch: limit and revision tables, to read.
import type { Pool } from '#lib/server/db/pool.ts';

/** A limit and the stretch of time in which it was in force. Times in milliseconds; `to` null while it stands. */
export interface LimitSpan {
	kind: 'high' | 'low';
	level: 'alert' | 'danger';
	value: number;
	from: number;
	to: number | null;
	origin: string;
	note: string | null;
}

/** Something of the tag's own that a trend marks beside its alarms. */
export interface CourseEvent {
	at: number;
	kind: 'published' | 'limits';
	revision: number;
	by: string;
	note: string;
}

/**
 * The high and low limits that were in force at some time in [from, to), oldest first. Those of a unit that the tag no longer has are left out,
 * as its readings are.
 */
export async function findLimitCourse(pool: Pool, tagId: number, from: number, to: number): Promise<LimitSpan[]> {
	const found = await pool.query<Omit<LimitSpan, 'from' | 'to'> & { from: Date; to: Date | null }>(
		`SELECT l.kind, l.level, l.value, begun.saved_at AS "from", ended.saved_at AS "to", l.origin, l.note
		 FROM limits l JOIN tags t ON t.id = l.tag_id
			JOIN limit_revisions begun ON begun.site_id = l.site_id AND begun.revision = l.from_revision
			LEFT JOIN limit_revisions ended ON ended.site_id = l.site_id AND ended.revision = l.to_revision
			LEFT JOIN map_revisions m ON m.site_id = t.site_id AND m.revision = t.unit_revision AND t.unit_revision > 1
		 WHERE l.tag_id = $1 AND l.kind IN ('high', 'low') AND l.value IS NOT NULL
			AND begun.saved_at < $3 AND (ended.saved_at IS NULL OR ended.saved_at > greatest($2::timestamptz, coalesce(m.published_at, '-infinity')))
		 ORDER BY begun.saved_at, l.id`,
		[tagId, new Date(from).toISOString(), new Date(to).toISOString()],
	);
	return found.rows.map((row) => ({ ...row, from: row.from.getTime(), to: row.to?.getTime() ?? null }));
}

/** Publishes that changed the tag, and changes of its limits, in [from, to), oldest first; at most 200. */
export async function findCourseEvents(pool: Pool, tagId: number, from: number, to: number): Promise<CourseEvent[]> {
	const found = await pool.query<Omit<CourseEvent, 'at'> & { at: Date }>(
		`SELECT m.published_at AS at, 'published' AS kind, m.revision, m.published_by AS by, m.note
		 FROM map_rows r JOIN map_revisions m ON m.site_id = r.site_id AND m.revision = r.from_revision
		 WHERE r.tag_id = $1 AND m.published_at >= $2 AND m.published_at < $3
		 UNION
		 SELECT v.saved_at, 'limits', v.revision, v.saved_by, v.note
		 FROM limits l JOIN limit_revisions v ON v.site_id = l.site_id AND v.revision IN (l.from_revision, l.to_revision)
		 WHERE l.tag_id = $1 AND v.saved_at >= $2 AND v.saved_at < $3
		 ORDER BY 1 LIMIT 200`,
		[tagId, new Date(from).toISOString(), new Date(to).toISOString()],
	);
	return found.rows.map((row) => ({ ...row, at: row.at.getTime() }));
}
