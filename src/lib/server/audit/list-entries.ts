// Edge: audit. May touch: audit table, insert and select only.
import { and, desc, eq, gte, ilike, isNull, lt, or, type SQL } from 'drizzle-orm';
import type { Db } from '#lib/server/db/pool.ts';
import { auditEntries } from '#lib/server/db/schema/audit.ts';
import { decodeIdCursor, encodeCursor } from '#lib/server/http/cursor.ts';

export type AuditEntry = typeof auditEntries.$inferSelect;

export interface AuditFilter {
	/** One site's entries; null for those of the installation; undefined for all. */
	siteId?: number | null;
	actorId?: string;
	/** `source.created`, or `source` for everything of sources. */
	action?: string;
	subjectKind?: string;
	subjectId?: string;
	/** Part of the actor's or the subject's name, or of the note. */
	search?: string;
	/** Half-open range. */
	from?: Date;
	to?: Date;
	/** Cursor of the page before. */
	after?: string;
	limit?: number;
}

/** Entries, newest first, one page; `next` is null on the last. A cursor that is none of ours begins at the newest. */
export async function listAuditEntries(db: Db, filter: AuditFilter): Promise<{ items: AuditEntry[]; next: string | null }> {
	const t = auditEntries;
	const limit = filter.limit ?? 200;
	const before = filter.after ? decodeIdCursor(filter.after) : null;
	const like = filter.search ? `%${filter.search.replace(/[\\%_]/g, '\\$&')}%` : null;
	const conditions: (SQL | undefined)[] = [
		filter.siteId === undefined ? undefined : filter.siteId === null ? isNull(t.siteId) : eq(t.siteId, filter.siteId),
		filter.actorId ? eq(t.actorId, filter.actorId) : undefined,
		filter.action
			? filter.action.includes('.')
				? eq(t.action, filter.action)
				: ilike(t.action, `${filter.action.replace(/[\\%_]/g, '\\$&')}.%`)
			: undefined,
		filter.subjectKind ? eq(t.subjectKind, filter.subjectKind) : undefined,
		filter.subjectId ? eq(t.subjectId, filter.subjectId) : undefined,
		like ? or(ilike(t.actorName, like), ilike(t.subjectName, like), ilike(t.note, like)) : undefined,
		filter.from ? gte(t.at, filter.from) : undefined,
		filter.to ? lt(t.at, filter.to) : undefined,
		before === null ? undefined : lt(t.id, before),
	];
	const rows = await db
		.select()
		.from(t)
		.where(and(...conditions))
		.orderBy(desc(t.id))
		.limit(limit + 1);
	const items = rows.slice(0, limit);
	const last = items.at(-1);
	return { items, next: rows.length > limit && last ? encodeCursor([last.id]) : null };
}
