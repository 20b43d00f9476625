// Edge: people. May touch: user, session and role tables; outbox.
import { eq } from 'drizzle-orm';
import { ok, refuse, type Outcome } from '#lib/domain/outcome.ts';
import { recordAudit, type AuditActor } from '#lib/server/audit/record.ts';
import type { Pool } from '#lib/server/db/pool.ts';
import { users } from '#lib/server/db/schema/user.ts';
import { inTransaction } from '#lib/server/db/transaction.ts';

/** Changes the name that screens and the log of changes show from now on. Refusals: 'person-not-found'. */
export async function renamePerson(
	pool: Pool,
	input: { id: string; name: string; actor: AuditActor; ip: string | null },
): Promise<Outcome<null, 'person-not-found'>> {
	return inTransaction(pool, async (db) => {
		const [user] = await db.select().from(users).where(eq(users.id, input.id)).for('update');
		if (!user) return refuse('person-not-found');
		await db.update(users).set({ name: input.name.trim() }).where(eq(users.id, input.id));
		await recordAudit(db, {
			siteId: null,
			actor: input.actor,
			ip: input.ip,
			action: 'person.renamed',
			subjectKind: 'person',
			subjectId: user.id,
			subjectName: input.name.trim(),
			before: { name: user.name },
			after: { name: input.name.trim() },
		});
		return ok(null);
	});
}
