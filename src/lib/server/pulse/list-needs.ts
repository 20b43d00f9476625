// Edge: pulse. May touch: web pool, select only.
import type { Pool } from '#lib/server/db/pool.ts';

/** One thing that needs somebody. The page puts the words to it; nothing here depends on a language or a time zone. */
export interface Need {
	key: string;
	kind: 'alarm' | 'source' | 'battery' | 'draft';
	/** Smaller is more urgent. */
	rank: number;
	level: 'danger' | 'alert' | 'stale' | 'maintenance' | 'edit';
	since: string | null;
	acknowledgedAt: string | null;
	acknowledgedBy: string | null;
	alarm: {
		id: number;
		tag: string;
		kind: string;
		direction: string;
		machine: string | null;
		point: string | null;
		axis: string | null;
		quantity: string | null;
		unit: string;
		detector: string;
		raisedValue: number | null;
		value: number | null;
		alertAt: number | null;
		dangerAt: number | null;
		hasReturned: boolean;
		isTest: boolean;
		isUncertain: boolean;
		response: string | null;
		low: number | null;
		high: number | null;
	} | null;
	source: {
		id: string;
		name: string;
		state: string;
		text: string | null;
		check: string | null;
		stale: number;
		tags: number;
		alarmId: number | null;
	} | null;
	battery: { tag: string; machine: string | null; point: string | null; value: number; perDay: number | null } | null;
	draft: { changed: number; base: number; by: string | null } | null;
}

const EMPTY = { alarm: null, source: null, battery: null, draft: null, acknowledgedAt: null, acknowledgedBy: null };

const ALARMS = `
SELECT a.id, a.kind, a.direction, a.level, a.level_now, a.raised_value, a.raised_at, a.cleared_at, a.acknowledged_at, a.acknowledged_by,
	a.is_test, a.is_uncertain, t.name AS tag, t.unit, t.detector, t.quantity, t.row->>'machine' AS machine, t.row->>'point' AS point, t.row->>'axis' AS axis,
	(t.row->>'low_range')::float8 AS low, (t.row->>'high_range')::float8 AS high, l.value,
	met.response,
	(SELECT min(x.value) FROM limits x WHERE x.tag_id = t.id AND x.to_revision IS NULL AND x.kind = a.kind AND x.level = 'alert') AS alert_at,
	(SELECT min(x.value) FROM limits x WHERE x.tag_id = t.id AND x.to_revision IS NULL AND x.kind = a.kind AND x.level = 'danger') AS danger_at
FROM alarms a JOIN tags t ON t.id = a.tag_id
	LEFT JOIN latest l ON l.tag_id = t.id
	LEFT JOIN limits met ON met.id = a.limit_id
	LEFT JOIN tag_states ts ON ts.tag_id = a.tag_id
	LEFT JOIN source_health h ON h.source_id = t.source_id
WHERE a.site_id = $1 AND (a.cleared_at IS NULL OR a.acknowledged_at IS NULL) AND NOT a.is_late
	AND coalesce(ts.shelved_until < now(), true) AND coalesce(ts.out_of_service_until < now(), true)
	AND (a.kind <> 'stale' OR (ts.suppressed_by IS NULL AND coalesce(h.state, 'ok') NOT IN ('lost', 'late')))
ORDER BY a.raised_at DESC LIMIT 200`;

const SOURCES = `
SELECT s.id, s.name, h.state, h.since, h.advice, h.tags, h.stale_tags, a.id AS alarm_id, a.acknowledged_at, a.acknowledged_by
FROM sources s JOIN source_health h ON h.source_id = s.id
	LEFT JOIN alarms a ON a.source_id = s.id AND a.cleared_at IS NULL
WHERE s.site_id = $1 AND s.deleted_at IS NULL AND s.enabled AND h.state IN ('lost', 'late')`;

const BATTERIES = `
SELECT t.name AS tag, t.row->>'machine' AS machine, t.row->>'point' AS point, l.value, l.at,
	(SELECT (l.value - r.value) / nullif(extract(epoch FROM l.at - r.at) / 86400, 0) FROM reading_history r
	 WHERE r.tag_id = t.id AND r.at > now() - interval '30 days' AND r.at < l.at - interval '1 day' AND r.value IS NOT NULL
		AND r.hour >= date_trunc('hour', now() - interval '30 days', 'UTC')
		-- Of what is packed the first block is enough.
		AND r.hour <= coalesce((SELECT min(b.hour) FROM reading_blocks b WHERE b.tag_id = t.id AND b.hour >= now() - interval '30 days'), 'infinity') ORDER BY r.at LIMIT 1) AS per_day
FROM tags t JOIN latest l ON l.tag_id = t.id
WHERE t.site_id = $1 AND t.quantity = 'battery' AND t.unit = '%' AND t.retired_at IS NULL AND t.published_at IS NOT NULL AND l.value < 20
ORDER BY l.value LIMIT 20`;

const DRAFT = `
SELECT coalesce((SELECT max(m.revision) FROM map_revisions m WHERE m.site_id = d.site_id), 0) AS base, d.updated_at, d.updated_by, count(r.tag_id)::int AS changed
FROM map_drafts d LEFT JOIN draft_rows r ON r.site_id = d.site_id
WHERE d.site_id = $1 GROUP BY d.site_id`;

const iso = (date: Date | null): string | null => date?.toISOString() ?? null;

/** What needs somebody at a site, most urgent first. */
export async function listNeeds(pool: Pool, siteId: number): Promise<Need[]> {
	const [alarms, sources, batteries, draft] = await Promise.all([
		pool.query(ALARMS, [siteId]),
		pool.query(SOURCES, [siteId]),
		pool.query(BATTERIES, [siteId]),
		pool.query(DRAFT, [siteId]),
	]);
	const needs: Need[] = [];
	for (const row of alarms.rows) {
		const level: 'danger' | 'alert' = row.level_now ?? row.level;
		const isNew = row.acknowledged_at === null;
		const isStale = row.kind === 'stale';
		needs.push({
			...EMPTY,
			key: `alarm-${row.id}`,
			kind: 'alarm',
			rank: (level === 'danger' ? 0 : isStale ? 3 : 2) + (isNew ? 0 : 4) + (row.cleared_at ? 1 : 0),
			level: isStale ? 'stale' : level,
			since: iso(row.raised_at),
			acknowledgedAt: iso(row.acknowledged_at),
			acknowledgedBy: row.acknowledged_by,
			alarm: {
				id: row.id,
				tag: row.tag,
				kind: row.kind,
				direction: row.direction,
				machine: row.machine,
				point: row.point,
				axis: row.axis,
				quantity: row.quantity,
				unit: row.unit,
				detector: row.detector,
				raisedValue: row.raised_value,
				value: row.value,
				alertAt: row.alert_at,
				dangerAt: row.danger_at,
				hasReturned: row.cleared_at !== null,
				isTest: row.is_test,
				isUncertain: row.is_uncertain,
				response: row.response,
				low: row.low,
				high: row.high,
			},
		});
	}
	for (const row of sources.rows) {
		needs.push({
			...EMPTY,
			key: `source-${row.id}`,
			kind: 'source',
			rank: (row.state === 'lost' ? 1 : 3) + (row.acknowledged_at ? 4 : 0),
			level: 'stale',
			since: iso(row.since),
			acknowledgedAt: iso(row.acknowledged_at),
			acknowledgedBy: row.acknowledged_by,
			source: {
				id: row.id,
				name: row.name,
				state: row.state,
				text: row.advice?.text ?? null,
				check: row.advice?.check ?? null,
				stale: row.stale_tags,
				tags: row.tags,
				alarmId: row.alarm_id,
			},
		});
	}
	for (const row of batteries.rows) {
		needs.push({
			...EMPTY,
			key: `battery-${row.tag}`,
			kind: 'battery',
			rank: 8,
			level: 'maintenance',
			since: iso(row.at),
			battery: { tag: row.tag, machine: row.machine, point: row.point, value: row.value, perDay: row.per_day },
		});
	}
	const open = draft.rows[0];
	if (open && open.changed > 0) {
		needs.push({
			...EMPTY,
			key: 'draft',
			kind: 'draft',
			rank: 9,
			level: 'edit',
			since: iso(open.updated_at),
			draft: { changed: open.changed, base: open.base, by: open.updated_by },
		});
	}
	return needs.sort((a, b) => a.rank - b.rank || (b.since ?? '').localeCompare(a.since ?? ''));
}
