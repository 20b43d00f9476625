// Edge: limits. May touch: limit tables; store finders.
import { and, eq, inArray, isNotNull, isNull, sql } from 'drizzle-orm';
import type { Limit } from '#lib/domain/limit.ts';
import { recordAudit, type AuditActor } from '#lib/server/audit/record.ts';
import type { Pool } from '#lib/server/db/pool.ts';
import { limitRevisions, limits, tags } from '#lib/server/db/schema/tag-map.ts';
import { inTransaction } from '#lib/server/db/transaction.ts';
import { isSameLimit, limitKey, toLimitColumns, toLimitJson } from './limit-json.ts';
import { LIMIT_COLUMNS, readLimitRevision } from './list-limits.ts';

export interface SaveLimitsInput {
	siteId: number;
	limits: readonly Limit[];
	/** Tags whose limits are replaced although none is given for them: that is how the last limit goes. */
	tags?: readonly string[];
	note: string;
	actor: AuditActor;
	ip: string | null;
}

/** One thing wrong, by its place among what was given. */
export interface LimitFault {
	path: readonly ['limits', number, string] | readonly ['tags', number];
	detail: string;
}

export type SaveLimitsResult = { ok: true; revision: number; changedTags: string[] } | { ok: false; faults: LimitFault[] };

/**
 * Replaces the limits of every tag named, as one new revision; limits that stay the same stay the same row, so that open
 * alarms keep theirs. Nothing changed makes no revision. Faults: a tag that is not published here; two limits of one kind and level.
 */
export async function saveLimits(pool: Pool, input: SaveLimitsInput): Promise<SaveLimitsResult> {
	return inTransaction(pool, async (db) => {
		// Revisions are numbered without a gap, so savers of one site take turns.
		await db.execute(sql`select pg_advisory_xact_lock(hashtext('limits'), ${input.siteId})`);
		const names = [
			...new Set([...input.limits.map((limit) => limit.tag), ...(input.tags ?? [])].map((name) => name.toLowerCase())),
		];
		const found =
			names.length === 0
				? []
				: await db
						.select({ id: tags.id, name: tags.name })
						.from(tags)
						.where(
							and(
								eq(tags.siteId, input.siteId),
								isNotNull(tags.publishedAt),
								isNull(tags.retiredAt),
								inArray(sql`lower(${tags.name})`, names),
							),
						);
		const byName = new Map(found.map((tag) => [tag.name.toLowerCase(), tag]));
		const faults = findFaults(input, byName);
		if (faults.length > 0) return { ok: false, faults };

		const standing =
			found.length === 0
				? []
				: await db
						.select({ id: limits.id, tagId: limits.tagId, ...LIMIT_COLUMNS })
						.from(limits)
						.where(
							and(
								inArray(
									limits.tagId,
									found.map((tag) => tag.id),
								),
								isNull(limits.toRevision),
							),
						);
		const revision = (await readLimitRevision(db, input.siteId)) + 1;
		const ends: number[] = [];
		const begins: (typeof limits.$inferInsert)[] = [];
		const changed: { id: number; name: string; before: Limit[]; after: Limit[] }[] = [];
		// In the order given, so that a list reads as it was sent.
		for (const name of names) {
			const tag = byName.get(name);
			if (!tag) continue;
			const before = standing.filter((row) => row.tagId === tag.id);
			const after = input.limits.filter((limit) => limit.tag.toLowerCase() === tag.name.toLowerCase()).map(toLimitColumns);
			const gone = before.filter((old) => !after.some((one) => isSameLimit(columnsOf(old), one)));
			const fresh = after.filter((one) => !before.some((old) => isSameLimit(columnsOf(old), one)));
			if (gone.length === 0 && fresh.length === 0) continue;
			ends.push(...gone.map((row) => row.id));
			begins.push(...fresh.map((row) => ({ ...row, siteId: input.siteId, tagId: tag.id, fromRevision: revision })));
			changed.push({
				...tag,
				before: before.map((row) => toLimitJson(tag.name, row)),
				after: after.map((row) => toLimitJson(tag.name, row)),
			});
		}
		if (changed.length === 0) return { ok: true, revision: revision - 1, changedTags: [] };

		await db.insert(limitRevisions).values({ siteId: input.siteId, revision, savedBy: input.actor.name, note: input.note });
		if (ends.length > 0) await db.update(limits).set({ toRevision: revision }).where(inArray(limits.id, ends));
		// A statement takes at most 65,535 parameters; a limit has 19.
		for (let from = 0; from < begins.length; from += 1_000) await db.insert(limits).values(begins.slice(from, from + 1_000));
		for (const tag of changed) {
			await recordAudit(db, {
				siteId: input.siteId,
				actor: input.actor,
				ip: input.ip,
				action: 'limit.changed',
				subjectKind: 'tag',
				subjectId: tag.id,
				subjectName: tag.name,
				before: tag.before,
				after: tag.after,
				note: input.note,
			});
		}
		// Collectors take them up within a second or two.
		await db.execute(sql`select pg_notify('millrace_limits', ${String(input.siteId)})`);
		return { ok: true, revision, changedTags: changed.map((tag) => tag.name) };
	});
}

function columnsOf<T extends { id: number; tagId: number }>({ id: _id, tagId: _tagId, ...columns }: T): Omit<T, 'id' | 'tagId'> {
	return columns;
}

function findFaults(input: SaveLimitsInput, byName: ReadonlyMap<string, unknown>): LimitFault[] {
	const faults: LimitFault[] = [];
	const seen = new Set<string>();
	const unknown = 'no published tag of this site has that name';
	input.limits.forEach((limit, index) => {
		const name = limit.tag.toLowerCase();
		if (!byName.has(name)) faults.push({ path: ['limits', index, 'tag'], detail: unknown });
		const key = `${name} ${limitKey(limit)}`;
		if (seen.has(key))
			faults.push({
				path: ['limits', index, 'kind'],
				detail: `the tag has a ${limit.level} limit of kind ${limit.kind} above already`,
			});
		seen.add(key);
	});
	(input.tags ?? []).forEach((name, index) => {
		if (!byName.has(name.toLowerCase())) faults.push({ path: ['tags', index], detail: unknown });
	});
	return faults;
}
