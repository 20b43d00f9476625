// Edge: store. May touch: pool. Names and units of tags, kept for a moment so that no row of a feed asks for them.
import type { Pool } from '#lib/server/db/pool.ts';

export interface TagFacts {
	id: number;
	name: string;
	unit: string;
	detector: string;
}

/** How long a rename may take to show in a feed. */
const FRESH_MS = 1_000;

interface Known {
	readAt: number;
	byId: Map<number, TagFacts>;
}
const known = new WeakMap<Pool, Map<number, Known>>();

/** Facts of a site's tags by id, retired ones included; at most a second old. A reading of a tag that came since asks anew. */
export async function tagFacts(pool: Pool, siteId: number, needs?: Iterable<number>): Promise<ReadonlyMap<number, TagFacts>> {
	const sites = known.get(pool) ?? new Map<number, Known>();
	known.set(pool, sites);
	const have = sites.get(siteId);
	if (have && performance.now() - have.readAt < FRESH_MS) {
		let complete = true;
		for (const id of needs ?? []) if (!have.byId.has(id)) complete = false;
		if (complete) return have.byId;
	}
	const found = await pool.query<TagFacts>('SELECT id, name, unit, detector FROM tags WHERE site_id = $1', [siteId]);
	const byId = new Map(found.rows.map((row) => [row.id, row]));
	sites.set(siteId, { readAt: performance.now(), byId });
	return byId;
}
