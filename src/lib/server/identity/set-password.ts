// Edge: identity. May touch: user, session, role and key tables; cookies.
import { and, eq, isNotNull, isNull, sql } from 'drizzle-orm';
import { ok, refuse, type Outcome } from '#lib/domain/outcome.ts';
import { recordAudit, type AuditActor } from '#lib/server/audit/record.ts';
import type { Db, Pool } from '#lib/server/db/pool.ts';
import { users } from '#lib/server/db/schema/user.ts';
import { inTransaction } from '#lib/server/db/transaction.ts';
import { enqueueMail } from '#lib/server/outbox/enqueue.ts';
import { countLetter } from './attempt-limit.ts';
import { createLink, findLinkPerson, useLink, type LinkKind } from './one-time-link.ts';
import { hashPassword } from './password.ts';
import { findPasswordFault, type PasswordFault } from './password-rules.ts';
import { endAllSessions } from './session.ts';

/** Time that asking for a link takes at least, so that it tells nothing of who exists. */
const ASKING_TAKES_MS = 250;

/**
 * Sends a link to set a new password, where somebody has that address and has taken up their invitation. The answer is the same for everybody.
 * Refusals: 'too-many-attempts' with the seconds to wait as detail.
 */
export async function askForReset(
	pool: Pool,
	input: { email: string; origin: string; ip: string },
): Promise<Outcome<null, 'too-many-attempts'>> {
	const email = input.email.trim();
	const waitS = await countLetter(email, input.ip);
	if (waitS > 0) return refuse('too-many-attempts', String(waitS));
	const work = inTransaction(pool, async (db) => {
		const [user] = await db
			.select()
			.from(users)
			.where(and(sql`lower(${users.email}) = lower(${email})`, isNull(users.disabledAt), isNotNull(users.passwordHash)));
		if (!user) return;
		const token = await createLink(db, 'reset', user.id);
		await enqueueMail(db, user.email, {
			subject: 'Set a new password for Millrace',
			text: `Hello ${user.name},\n\nsomebody, most likely you, asked to set a new password. This link works once, for an hour:\n\n${input.origin}/reset/${token}\n\nIf it was not you, leave it: nothing has changed.\n`,
		});
		await recordAudit(db, {
			siteId: null,
			actor: { kind: 'system', name: 'reset' },
			ip: input.ip,
			action: 'password.reset-asked',
			subjectKind: 'person',
			subjectId: user.id,
			subjectName: user.name,
		});
	});
	await Promise.all([work, new Promise((resolve) => setTimeout(resolve, ASKING_TAKES_MS))]);
	return ok(null);
}

export type SetPasswordRefusal = 'link-over' | PasswordFault;

/**
 * Sets the password of a link's person, uses the link up and ends every session they had.
 * Refusals: 'link-over' for a used, old or unknown link; a `PasswordFault`, which leaves the link standing.
 */
export async function setPasswordByLink(
	pool: Pool,
	kind: LinkKind,
	input: { token: string; password: string; ip: string },
): Promise<Outcome<typeof users.$inferSelect, SetPasswordRefusal>> {
	return inTransaction(pool, async (db) => {
		const user = await findLinkPerson(db, kind, input.token);
		if (!user) return refuse('link-over');
		const fault = findPasswordFault(input.password, user);
		if (fault) return refuse(fault);
		if ((await useLink(db, kind, input.token)) !== user.id) return refuse('link-over');
		await writePassword(db, user, input.password, {
			actor: { kind: 'person', id: user.id, name: user.name, email: user.email, isAdmin: user.isAdmin, roles: {} },
			ip: input.ip,
			action: kind === 'invite' ? 'person.invitation-taken' : 'password.reset',
		});
		return ok(user);
	});
}

/** Sets the password of a known person, at the console. Refusals: 'person-not-found'; a `PasswordFault`. */
export async function setPasswordOf(
	pool: Pool,
	input: { email: string; password: string; actor: AuditActor },
): Promise<Outcome<{ id: string }, 'person-not-found' | PasswordFault>> {
	return inTransaction(pool, async (db) => {
		const [user] = await db
			.select()
			.from(users)
			.where(sql`lower(${users.email}) = lower(${input.email.trim()})`);
		if (!user) return refuse('person-not-found');
		const fault = findPasswordFault(input.password, user);
		if (fault) return refuse(fault);
		await writePassword(db, user, input.password, { actor: input.actor, ip: null, action: 'password.set' });
		return ok({ id: user.id });
	});
}

async function writePassword(
	db: Db,
	user: { id: string; name: string },
	password: string,
	entry: { actor: AuditActor; ip: string | null; action: string },
): Promise<void> {
	await db
		.update(users)
		.set({ passwordHash: await hashPassword(password) })
		.where(eq(users.id, user.id));
	await endAllSessions(db, user.id);
	await recordAudit(db, { ...entry, siteId: null, subjectKind: 'person', subjectId: user.id, subjectName: user.name });
}
