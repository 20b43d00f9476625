// Edge: pulse. May touch: web pool, select only.
import type { Pool } from '#lib/server/db/pool.ts';

/** What comes from where and goes to whom. */
export interface Flow {
	sources: {
		id: string;
		name: string;
		kind: string;
		transport: string | null;
		enabled: boolean;
		state: string;
		tags: number;
		stale: number;
	}[];
	areas: { name: string; machines: { id: number; name: string }[]; alert: number; danger: number; tags: number; stale: number }[];
	/** Expected readings a second from a source into an area. */
	strands: { source: string; area: string; tags: number; stale: number; perSecond: number }[];
	/** Who reads the feed, and how many readings behind. */
	readers: { name: string; behind: number; readAt: string }[];
	totals: { tags: number; machines: number; sources: number };
}

const STRANDS = `
SELECT t.source_id AS source, coalesce(nullif(t.row->>'area', ''), ar.name, 'No area') AS area, count(*)::int AS tags,
	count(*) FILTER (WHERE l.is_stale)::int AS stale,
	sum(1000.0 / greatest(coalesce((t.row->>'interval_ms')::float8, 1000), coalesce((t.row->>'expected_every_s')::float8, 0) * 1000, 1))::float8 AS per_second,
	count(*) FILTER (WHERE l.verdict = 'alert' AND NOT l.is_stale)::int AS alert,
	count(*) FILTER (WHERE l.verdict = 'danger' AND NOT l.is_stale)::int AS danger
FROM tags t LEFT JOIN latest l ON l.tag_id = t.id
	LEFT JOIN machines m ON m.id = t.machine_id LEFT JOIN areas ar ON ar.id = m.area_id
WHERE t.site_id = $1 AND t.published_at IS NOT NULL AND t.retired_at IS NULL AND t.source_id IS NOT NULL
GROUP BY 1, 2`;

const SOURCES = `
SELECT s.id, s.name, s.kind, s.enabled, s.settings->>'transport' AS transport, s.settings->>'payload' AS payload, coalesce(h.state, 'waiting') AS state
FROM sources s LEFT JOIN source_health h ON h.source_id = s.id
WHERE s.site_id = $1 AND s.deleted_at IS NULL ORDER BY s.created_at, s.name`;

const MACHINES = `
SELECT m.id, m.name, coalesce(a.name, 'No area') AS area FROM machines m LEFT JOIN areas a ON a.id = m.area_id
WHERE m.site_id = $1 AND m.deleted_at IS NULL ORDER BY m.name`;

const READERS = `
SELECT r.name, greatest(f.position - r.position, 0) AS behind, r.read_at FROM feed_readers r JOIN feed_heads f ON f.site_id = r.site_id
WHERE r.site_id = $1 AND r.read_at > now() - interval '1 day' ORDER BY r.name LIMIT 40`;

/** Sources, areas with their machines, the strands between them and the readers of the feed. */
export async function readFlow(pool: Pool, siteId: number): Promise<Flow> {
	const [strands, sources, machines, readers] = await Promise.all([
		pool.query(STRANDS, [siteId]),
		pool.query(SOURCES, [siteId]),
		pool.query(MACHINES, [siteId]),
		pool.query(READERS, [siteId]),
	]);
	const areas = new Map<string, Flow['areas'][number]>();
	const areaOf = (name: string) => {
		let area = areas.get(name);
		if (!area) areas.set(name, (area = { name, machines: [], alert: 0, danger: 0, tags: 0, stale: 0 }));
		return area;
	};
	for (const machine of machines.rows) areaOf(machine.area).machines.push({ id: machine.id, name: machine.name });
	for (const strand of strands.rows) {
		const area = areaOf(strand.area);
		area.alert += strand.alert;
		area.danger += strand.danger;
		area.tags += strand.tags;
		area.stale += strand.stale;
	}
	const sums = (source: string, field: 'tags' | 'stale') =>
		strands.rows.filter((strand) => strand.source === source).reduce((sum, strand) => sum + strand[field], 0);
	return {
		sources: sources.rows.map((row) => ({
			id: row.id,
			name: row.name,
			kind: row.kind,
			enabled: row.enabled,
			state: row.state,
			transport: row.kind === 'mqtt' ? row.payload : row.transport,
			tags: sums(row.id, 'tags'),
			stale: sums(row.id, 'stale'),
		})),
		areas: [...areas.values()].sort((a, b) => b.tags - a.tags),
		strands: strands.rows.map((row) => ({
			source: row.source,
			area: row.area,
			tags: row.tags,
			stale: row.stale,
			perSecond: row.per_second,
		})),
		readers: readers.rows.map((row) => ({ name: row.name, behind: Number(row.behind), readAt: row.read_at.toISOString() })),
		totals: {
			tags: strands.rows.reduce((sum, row) => sum + row.tags, 0),
			machines: machines.rows.length,
			sources: sources.rows.length,
		},
	};
}
