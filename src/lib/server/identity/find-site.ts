// Edge: identity. May touch: site table.
import { asc, eq } from 'drizzle-orm';
import type { Db } from '#lib/server/db/pool.ts';
import { sites } from '#lib/server/db/schema/site.ts';

export interface Site {
	id: number;
	slug: string;
	name: string;
	timeZone: string;
}

const COLUMNS = { id: sites.id, slug: sites.slug, name: sites.name, timeZone: sites.timeZone };

/** The site of that slug, or null. Says nothing of who may see it. */
export async function findSite(db: Db, slug: string): Promise<Site | null> {
	const [site] = await db.select(COLUMNS).from(sites).where(eq(sites.slug, slug));
	return site ?? null;
}

/** Every site, by name. */
export async function listSites(db: Db): Promise<Site[]> {
	return db.select(COLUMNS).from(sites).orderBy(asc(sites.name), asc(sites.id));
}
