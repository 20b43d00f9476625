// Edge: alarms. May touch: alarm tables.
import { and, eq, isNull, sql } from 'drizzle-orm';
import { ok, refuse, type Outcome } from '#lib/domain/outcome.ts';
import { recordAudit, type AuditActor } from '#lib/server/audit/record.ts';
import type { Db, Pool } from '#lib/server/db/pool.ts';
import { alarmEvents, alarms, tagStates } from '#lib/server/db/schema/alarm.ts';
import { tags } from '#lib/server/db/schema/tag-map.ts';
import { inTransaction } from '#lib/server/db/transaction.ts';

/** Longest that a tag's alarms may be kept quiet: shelving ends by itself, out of service is for longer. */
export const LONGEST_SHELVE_S = 30 * 86_400;

interface By {
	siteId: number;
	tag: string;
	note: string | null;
	actor: AuditActor;
	ip: string | null;
}

/** Keeps the alarms of a tag quiet until a time; they are judged and recorded all the same. Refusals: 'tag-not-found'. */
export async function shelveTag(
	pool: Pool,
	input: By & { until: Date },
): Promise<Outcome<{ tag: string; until: Date }, 'tag-not-found'>> {
	return inTransaction(pool, async (db) => {
		const tag = await findLiveTag(db, input.siteId, input.tag);
		if (!tag) return refuse('tag-not-found');
		const shelved = { shelvedUntil: input.until, shelvedBy: input.actor.name, shelvedNote: input.note };
		const [before] = await db.select({ until: tagStates.shelvedUntil }).from(tagStates).where(eq(tagStates.tagId, tag.id));
		await db
			.insert(tagStates)
			.values({ tagId: tag.id, ...shelved })
			.onConflictDoUpdate({ target: tagStates.tagId, set: shelved });
		await tellAlarms(db, tag.id, 'shelved', input);
		await record(db, 'tag.shelved', tag, input, before?.until ?? null, input.until);
		return ok({ tag: tag.name, until: input.until });
	});
}

/** Ends shelving before its time. Refusals: 'tag-not-found'; 'not-shelved'. */
export async function unshelveTag(pool: Pool, input: By): Promise<Outcome<{ tag: string }, 'tag-not-found' | 'not-shelved'>> {
	return inTransaction(pool, async (db) => {
		const tag = await findLiveTag(db, input.siteId, input.tag);
		if (!tag) return refuse('tag-not-found');
		const [state] = await db.select().from(tagStates).where(eq(tagStates.tagId, tag.id)).for('update');
		if (!state?.shelvedUntil || state.shelvedUntil <= new Date()) return refuse('not-shelved');
		await db.update(tagStates).set({ shelvedUntil: null, shelvedBy: null, shelvedNote: null }).where(eq(tagStates.tagId, tag.id));
		await tellAlarms(db, tag.id, 'unshelved', input);
		await record(db, 'tag.unshelved', tag, input, state.shelvedUntil, null);
		return ok({ tag: tag.name });
	});
}

async function findLiveTag(db: Db, siteId: number, name: string): Promise<{ id: number; name: string } | null> {
	const [tag] = await db
		.select({ id: tags.id, name: tags.name })
		.from(tags)
		.where(
			and(
				eq(tags.siteId, siteId),
				sql`${tags.publishedAt} is not null`,
				isNull(tags.retiredAt),
				sql`lower(${tags.name}) = lower(${name})`,
			),
		);
	return tag ?? null;
}

async function tellAlarms(db: Db, tagId: number, kind: 'shelved' | 'unshelved', by: By): Promise<void> {
	const open = await db
		.select({ id: alarms.id, level: alarms.level })
		.from(alarms)
		.where(and(eq(alarms.tagId, tagId), isNull(alarms.clearedAt)));
	if (open.length === 0) return;
	const at = new Date();
	await db
		.insert(alarmEvents)
		.values(open.map((alarm) => ({ alarmId: alarm.id, at, kind, level: alarm.level, by: by.actor.name, note: by.note })));
}

async function record(
	db: Db,
	action: string,
	tag: { id: number; name: string },
	by: By,
	before: Date | null,
	after: Date | null,
): Promise<void> {
	await recordAudit(db, {
		siteId: by.siteId,
		actor: by.actor,
		ip: by.ip,
		action,
		subjectKind: 'tag',
		subjectId: tag.id,
		subjectName: tag.name,
		before: { shelved_until: before },
		after: { shelved_until: after },
		note: by.note,
	});
}
