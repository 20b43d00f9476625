// Edge: alarms. May touch: alarm tables.
import { and, eq, gt, inArray, isNull, sql } from 'drizzle-orm';
import { ok, refuse, type Outcome } from '#lib/domain/outcome.ts';
import { recordAudit, type AuditActor } from '#lib/server/audit/record.ts';
import type { Db, Pool } from '#lib/server/db/pool.ts';
import { alarmEvents, alarms, tagStates } from '#lib/server/db/schema/alarm.ts';
import { machines } from '#lib/server/db/schema/site.ts';
import { tags } from '#lib/server/db/schema/tag-map.ts';
import { inTransaction } from '#lib/server/db/transaction.ts';

/** Longest that a tag or a machine may be out of service at a time. */
export const LONGEST_OUT_S = 400 * 86_400;

/** One tag by its name, or every published tag of a machine. */
export type Scope = { tag: string } | { machineId: number };

interface By {
	siteId: number;
	scope: Scope;
	note: string | null;
	actor: AuditActor;
	ip: string | null;
}

export interface InService {
	/** Name of the tag or of the machine. */
	name: string;
	/** How many tags it touched. */
	tags: number;
}
type Refusal = 'tag-not-found' | 'machine-not-found';

/**
 * Takes a tag or a whole machine out of service until a time: its readings are judged and its alarms recorded all the same, but nobody is called
 * and what is raised is marked. It ends by itself. Refusals: 'tag-not-found'; 'machine-not-found'.
 */
export async function takeOutOfService(pool: Pool, input: By & { until: Date }): Promise<Outcome<InService, Refusal>> {
	return inTransaction(pool, async (db) => {
		const found = await findScope(db, input.siteId, input.scope);
		if (!found.ok) return found;
		const { subject, tagIds } = found.value;
		const state = {
			outOfServiceUntil: input.until,
			outOfServiceBy: input.actor.name,
			outOfServiceNote: input.note,
		};
		for (let from = 0; from < tagIds.length; from += 1_000)
			await db
				.insert(tagStates)
				.values(tagIds.slice(from, from + 1_000).map((tagId) => ({ tagId, ...state })))
				.onConflictDoUpdate({ target: tagStates.tagId, set: state });
		await tellAlarms(db, tagIds, 'out-of-service', input);
		await record(db, 'out-of-service', subject, input, { tags: tagIds.length, out_of_service_until: input.until });
		return ok({ name: subject.name, tags: tagIds.length });
	});
}

/** Returns a tag or a machine to service before its time. Refusals: 'tag-not-found'; 'machine-not-found'; 'in-service' where nothing of it is out. */
export async function returnToService(pool: Pool, input: By): Promise<Outcome<InService, Refusal | 'in-service'>> {
	return inTransaction(pool, async (db) => {
		const found = await findScope(db, input.siteId, input.scope);
		if (!found.ok) return found;
		const { subject, tagIds } = found.value;
		const back =
			tagIds.length === 0
				? []
				: await db
						.update(tagStates)
						.set({ outOfServiceUntil: null, outOfServiceBy: null, outOfServiceNote: null })
						.where(and(inArray(tagStates.tagId, tagIds), gt(tagStates.outOfServiceUntil, new Date())))
						.returning({ tagId: tagStates.tagId });
		if (back.length === 0) return refuse('in-service');
		const ids = back.map((row) => row.tagId);
		await tellAlarms(db, ids, 'returned-to-service', input);
		await record(db, 'returned-to-service', subject, input, { tags: ids.length, out_of_service_until: null });
		return ok({ name: subject.name, tags: ids.length });
	});
}

export interface OutOfService {
	/** RFC 3339; the latest end of its tags. */
	until: string;
	by: string | null;
	note: string | null;
	/** How many of the machine's tags are out of service. */
	tags: number;
}

/** What of a machine is out of service now; null where nothing is. */
export async function findOutOfService(db: Db, machineId: number): Promise<OutOfService | null> {
	const rows = await db
		.select({ until: tagStates.outOfServiceUntil, by: tagStates.outOfServiceBy, note: tagStates.outOfServiceNote })
		.from(tagStates)
		.innerJoin(tags, eq(tags.id, tagStates.tagId))
		.where(and(eq(tags.machineId, machineId), isNull(tags.retiredAt), gt(tagStates.outOfServiceUntil, new Date())))
		.orderBy(sql`${tagStates.outOfServiceUntil} desc`);
	const [last] = rows;
	return last?.until ? { until: last.until.toISOString(), by: last.by, note: last.note, tags: rows.length } : null;
}

interface Subject {
	kind: 'tag' | 'machine';
	id: number;
	name: string;
}

async function findScope(
	db: Db,
	siteId: number,
	scope: Scope,
): Promise<Outcome<{ subject: Subject; tagIds: number[] }, Refusal>> {
	const isLive = and(eq(tags.siteId, siteId), sql`${tags.publishedAt} is not null`, isNull(tags.retiredAt));
	if ('tag' in scope) {
		const [tag] = await db
			.select({ id: tags.id, name: tags.name })
			.from(tags)
			.where(and(isLive, sql`lower(${tags.name}) = lower(${scope.tag})`));
		return tag ? ok({ subject: { kind: 'tag', ...tag }, tagIds: [tag.id] }) : refuse('tag-not-found');
	}
	const [machine] = await db
		.select({ id: machines.id, name: machines.name })
		.from(machines)
		.where(and(eq(machines.siteId, siteId), eq(machines.id, scope.machineId), isNull(machines.deletedAt)));
	if (!machine) return refuse('machine-not-found');
	const found = await db
		.select({ id: tags.id })
		.from(tags)
		.where(and(isLive, eq(tags.machineId, machine.id)));
	return ok({ subject: { kind: 'machine', ...machine }, tagIds: found.map((tag) => tag.id) });
}

async function tellAlarms(
	db: Db,
	tagIds: readonly number[],
	kind: 'out-of-service' | 'returned-to-service',
	by: By,
): Promise<void> {
	if (tagIds.length === 0) return;
	const open = await db
		.select({ id: alarms.id, level: alarms.level })
		.from(alarms)
		.where(and(inArray(alarms.tagId, [...tagIds]), isNull(alarms.clearedAt)));
	if (open.length === 0) return;
	const at = new Date();
	await db
		.insert(alarmEvents)
		.values(open.map((alarm) => ({ alarmId: alarm.id, at, kind, level: alarm.level, by: by.actor.name, note: by.note })));
}

async function record(db: Db, what: string, subject: Subject, by: By, after: Record<string, unknown>): Promise<void> {
	await recordAudit(db, {
		siteId: by.siteId,
		actor: by.actor,
		ip: by.ip,
		action: `${subject.kind}.${what}`,
		subjectKind: subject.kind,
		subjectId: subject.id,
		subjectName: subject.name,
		before: null,
		after,
		note: by.note,
	});
}
