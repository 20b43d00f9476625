// Edge: alarms. May touch: alarm tables.
import { and, eq } from 'drizzle-orm';
import { ok, refuse, type Outcome } from '#lib/domain/outcome.ts';
import { recordAudit, type AuditActor } from '#lib/server/audit/record.ts';
import type { Pool } from '#lib/server/db/pool.ts';
import { alarmEvents, alarms } from '#lib/server/db/schema/alarm.ts';
import { inTransaction } from '#lib/server/db/transaction.ts';
import { alarmStateOf, type AlarmJson } from './alarm-json.ts';
import { findAlarm } from './list-alarms.ts';

/**
 * Acknowledges an alarm; one whose condition has gone is closed by it.
 * Refusals: 'alarm-not-found'; 'already-acknowledged' with who did.
 */
export async function acknowledgeAlarm(
	pool: Pool,
	input: { siteId: number; id: number; note: string | null; actor: AuditActor; ip: string | null },
): Promise<Outcome<AlarmJson, 'alarm-not-found' | 'already-acknowledged'>> {
	return inTransaction(pool, async (db) => {
		// The lock makes two people at once one after the other.
		const [alarm] = await db
			.select()
			.from(alarms)
			.where(and(eq(alarms.siteId, input.siteId), eq(alarms.id, input.id)))
			.for('update');
		if (!alarm) return refuse('alarm-not-found');
		if (alarm.acknowledgedAt) return refuse('already-acknowledged', alarm.acknowledgedBy ?? undefined);
		const at = new Date();
		await db
			.update(alarms)
			.set({ acknowledgedAt: at, acknowledgedBy: input.actor.name, acknowledgeNote: input.note })
			.where(eq(alarms.id, alarm.id));
		await db
			.insert(alarmEvents)
			.values({ alarmId: alarm.id, at, kind: 'acknowledged', level: alarm.level, by: input.actor.name, note: input.note });
		const json = await findAlarm(db, input.siteId, alarm.id);
		if (!json) throw new Error(`alarm ${alarm.id} is gone although it is locked`);
		await recordAudit(db, {
			siteId: input.siteId,
			actor: input.actor,
			ip: input.ip,
			action: 'alarm.acknowledged',
			subjectKind: 'alarm',
			subjectId: alarm.id,
			subjectName: json.tag ?? json.source,
			before: { state: alarmStateOf(alarm) },
			after: { state: json.state },
			note: input.note,
		});
		return ok(json);
	});
}
