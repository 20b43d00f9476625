// Edge: feed. May touch: store finders, tag finders.
import { resolveCursor } from '#lib/pipeline/store/find-feed.ts';
import type { Outcome } from '#lib/domain/outcome.ts';
import { createDb, type Pool } from '#lib/server/db/pool.ts';
import { badParameter } from '#lib/server/http/problem.ts';
import { findTagIds } from '#lib/server/tags/find-tags.ts';

export interface Place {
	position: number;
	epoch: string;
}

/** Where a reader goes on. Throws a 400 for what is no cursor; a cursor too old is the caller's to say. */
export async function resolvePlace(
	pool: Pool,
	siteId: number,
	after: string | undefined,
): Promise<Outcome<Place, 'cursor-gone'>> {
	const found = await resolveCursor(pool, siteId, after);
	if (!found.ok && found.reason === 'not-a-cursor') throw badParameter('after', found.detail ?? 'not a cursor of this feed');
	return found as Outcome<Place, 'cursor-gone'>;
}

/** Ids of the tags that a reader names; undefined for all. Throws a 400 that names those that are not there. */
export async function resolveTags(
	pool: Pool,
	siteId: number,
	names: readonly string[] | undefined,
): Promise<ReadonlySet<number> | undefined> {
	if (!names) return undefined;
	const { ids, unknown } = await findTagIds(createDb(pool), siteId, names);
	if (unknown.length > 0) throw badParameter('tags', `no published tag is named ${unknown.slice(0, 10).join(', ')}`);
	return new Set(ids);
}
