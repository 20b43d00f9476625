// Edge: limits. May touch: limit tables; store finders.
import { and, asc, desc, eq, gt, inArray, isNull, lte, or, sql, type SQL } from 'drizzle-orm';
import type { Limit } from '#lib/domain/limit.ts';
import type { Db } from '#lib/server/db/pool.ts';
import { limitRevisions, limits, tags } from '#lib/server/db/schema/tag-map.ts';
import { encodeCursor } from '#lib/server/http/cursor.ts';
import { toLimitJson } from './limit-json.ts';

export const LIMIT_COLUMNS = {
	kind: limits.kind,
	level: limits.level,
	value: limits.value,
	deadband: limits.deadband,
	raiseAfterS: limits.raiseAfterS,
	clearAfterS: limits.clearAfterS,
	windowS: limits.windowS,
	baseline: limits.baseline,
	state: limits.state,
	origin: limits.origin,
	note: limits.note,
	cause: limits.cause,
	consequence: limits.consequence,
	response: limits.response,
	respondWithinS: limits.respondWithinS,
};

export interface LimitFilter {
	siteId: number;
	/** Names. */
	tags?: readonly string[];
	/** Limits as they stood at that revision; absent: as they stand now. */
	revision?: number;
	/** Id that the page before ended at. */
	after?: number;
	limit?: number;
}

/** Limits of live tags, oldest first, one page. */
export async function listLimits(db: Db, filter: LimitFilter): Promise<{ items: Limit[]; next: string | null }> {
	const most = filter.limit ?? 1_000;
	const { revision } = filter;
	const conditions: (SQL | undefined)[] = [
		eq(limits.siteId, filter.siteId),
		revision === undefined
			? and(isNull(limits.toRevision), isNull(tags.retiredAt))
			: and(lte(limits.fromRevision, revision), or(isNull(limits.toRevision), gt(limits.toRevision, revision))),
		filter.tags
			? inArray(
					sql`lower(${tags.name})`,
					filter.tags.map((name) => name.toLowerCase()),
				)
			: undefined,
		filter.after === undefined ? undefined : gt(limits.id, filter.after),
	];
	const rows = await db
		.select({ id: limits.id, tag: tags.name, ...LIMIT_COLUMNS })
		.from(limits)
		.innerJoin(tags, eq(tags.id, limits.tagId))
		.where(and(...conditions))
		.orderBy(asc(limits.id))
		.limit(most + 1);
	const page = rows.slice(0, most);
	const last = page.at(-1);
	return {
		items: page.map((row) => toLimitJson(row.tag, row)),
		next: rows.length > most && last ? encodeCursor([last.id]) : null,
	};
}

/** Limits that stand now, by tag id. */
export async function findLimitsOf(db: Db, tagIds: readonly number[]): Promise<Map<number, Limit[]>> {
	const found = new Map<number, Limit[]>();
	if (tagIds.length === 0) return found;
	const rows = await db
		.select({ tagId: limits.tagId, tag: tags.name, ...LIMIT_COLUMNS })
		.from(limits)
		.innerJoin(tags, eq(tags.id, limits.tagId))
		.where(and(inArray(limits.tagId, [...tagIds]), isNull(limits.toRevision)))
		.orderBy(asc(limits.id));
	for (const row of rows) found.set(row.tagId, [...(found.get(row.tagId) ?? []), toLimitJson(row.tag, row)]);
	return found;
}

/** The newest revision of a site's limits; 0 before the first. */
export async function readLimitRevision(db: Db, siteId: number): Promise<number> {
	const [row] = await db
		.select({ revision: limitRevisions.revision })
		.from(limitRevisions)
		.where(eq(limitRevisions.siteId, siteId))
		.orderBy(desc(limitRevisions.revision))
		.limit(1);
	return row?.revision ?? 0;
}

/** Every revision, newest first. */
export async function listLimitRevisions(db: Db, siteId: number): Promise<(typeof limitRevisions.$inferSelect)[]> {
	return db.select().from(limitRevisions).where(eq(limitRevisions.siteId, siteId)).orderBy(desc(limitRevisions.revision));
}
