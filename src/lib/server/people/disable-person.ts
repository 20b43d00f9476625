// Edge: people. May touch: user, session and role tables; outbox.
import { eq } from 'drizzle-orm';
import { ok, refuse, type Outcome } from '#lib/domain/outcome.ts';
import { recordAudit, type AuditActor } from '#lib/server/audit/record.ts';
import type { Pool } from '#lib/server/db/pool.ts';
import { users } from '#lib/server/db/schema/user.ts';
import { inTransaction } from '#lib/server/db/transaction.ts';
import { endAllSessions } from '#lib/server/identity/session.ts';
import { isLastAdmin } from './last-admin.ts';

interface By {
	actor: AuditActor;
	ip: string | null;
}

/** Disables a person and ends their sessions; their name stays in history. Refusals: 'person-not-found'; 'last-admin'. */
export async function disablePerson(pool: Pool, id: string, by: By): Promise<Outcome<null, 'person-not-found' | 'last-admin'>> {
	return inTransaction(pool, async (db) => {
		const [user] = await db.select().from(users).where(eq(users.id, id)).for('update');
		if (!user) return refuse('person-not-found');
		if (user.disabledAt) return ok(null);
		if (user.isAdmin && (await isLastAdmin(db, id))) return refuse('last-admin');
		await db.update(users).set({ disabledAt: new Date() }).where(eq(users.id, id));
		await endAllSessions(db, id);
		await recordAudit(db, {
			...by,
			siteId: null,
			action: 'person.disabled',
			subjectKind: 'person',
			subjectId: id,
			subjectName: user.name,
		});
		return ok(null);
	});
}

/** Lets a disabled person in again. Refusals: 'person-not-found'. */
export async function enablePerson(pool: Pool, id: string, by: By): Promise<Outcome<null, 'person-not-found'>> {
	return inTransaction(pool, async (db) => {
		const [user] = await db.update(users).set({ disabledAt: null }).where(eq(users.id, id)).returning();
		if (!user) return refuse('person-not-found');
		await recordAudit(db, {
			...by,
			siteId: null,
			action: 'person.enabled',
			subjectKind: 'person',
			subjectId: id,
			subjectName: user.name,
		});
		return ok(null);
	});
}
