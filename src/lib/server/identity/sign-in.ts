// Edge: identity. May touch: user, session, role and key tables; cookies.
import { sql } from 'drizzle-orm';
import { ok, refuse, type Outcome } from '#lib/domain/outcome.ts';
import { recordAudit } from '#lib/server/audit/record.ts';
import type { Db } from '#lib/server/db/pool.ts';
import { users } from '#lib/server/db/schema/user.ts';
import { countAttempt, forgetAttempts } from './attempt-limit.ts';
import { passwordFits } from './password.ts';
import type { Person } from './require.ts';
import { endAllSessions, endSession, startSession, type Visit } from './session.ts';

export type SignInRefusal = 'wrong' | 'too-many-attempts';

/**
 * Signs a person in by address and password and sets the cookie.
 * Refusals: 'wrong' for an unknown address, a wrong password and a disabled account alike, in the same time;
 * 'too-many-attempts' with the seconds to wait as detail.
 */
export async function signIn(
	db: Db,
	input: { email: string; password: string },
	visit: Visit,
): Promise<Outcome<{ userId: string }, SignInRefusal>> {
	const email = input.email.trim();
	const waitS = await countAttempt(email, visit.ip);
	if (waitS > 0) return refuse('too-many-attempts', String(waitS));
	const [user] = await db
		.select()
		.from(users)
		.where(sql`lower(${users.email}) = lower(${email})`);
	const fits = await passwordFits(user?.passwordHash ?? null, input.password);
	if (!user || !fits || user.disabledAt) {
		await recordAudit(db, {
			siteId: null,
			actor: { kind: 'system', name: 'sign-in' },
			ip: visit.ip,
			action: 'session.refused',
			subjectKind: 'person',
			subjectId: user?.id,
			subjectName: email.slice(0, 200),
		});
		return refuse('wrong');
	}
	await forgetAttempts(email, visit.ip);
	await beginFor(db, user, visit);
	return ok({ userId: user.id });
}

/** Begins a session and writes it to the log of changes. */
export async function beginFor(db: Db, user: typeof users.$inferSelect, visit: Visit): Promise<void> {
	await startSession(db, user.id, visit);
	await recordAudit(db, {
		siteId: null,
		actor: { kind: 'person', id: user.id, name: user.name, email: user.email, isAdmin: user.isAdmin, roles: {} },
		ip: visit.ip,
		action: 'session.started',
		subjectKind: 'person',
		subjectId: user.id,
		subjectName: user.name,
	});
}

/** Ends this session, or all of the person's. The cookie is the caller's to forget. */
export async function signOut(
	db: Db,
	person: Person,
	sessionId: string | null,
	options: { everywhere: boolean; ip: string },
): Promise<void> {
	if (options.everywhere) await endAllSessions(db, person.id);
	else if (sessionId) await endSession(db, sessionId);
	await recordAudit(db, {
		siteId: null,
		actor: person,
		ip: options.ip,
		action: options.everywhere ? 'session.ended-everywhere' : 'session.ended',
		subjectKind: 'person',
		subjectId: person.id,
		subjectName: person.name,
	});
}
