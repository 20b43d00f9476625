// Edge: identity. May touch: user, session, role and key tables; cookies.
import { DrizzlePostgreSQLAdapter } from '@lucia-auth/adapter-drizzle';
import type { Cookies } from '@sveltejs/kit';
import { eq } from 'drizzle-orm';
import { Lucia, TimeSpan } from 'lucia';
import type { SiteRole } from '#lib/domain/access/role.ts';
import type { Db } from '#lib/server/db/pool.ts';
import { sites } from '#lib/server/db/schema/site.ts';
import { sessions, siteRoles, users } from '#lib/server/db/schema/user.ts';
import type { Person } from './require.ts';
import { hashToken, newToken } from './secret-token.ts';

/** Unused this long a session ends; used, it slides on. */
const IDLE = new TimeSpan(7, 'd');
/** Whatever its use, a session ends after this. */
const LONGEST_MS = 30 * 86_400_000;

function luciaOver(db: Db) {
	return new Lucia(new DrizzlePostgreSQLAdapter(db, sessions, users), {
		sessionExpiresIn: IDLE,
		getSessionAttributes: (row) => ({ createdAt: row.createdAt }),
		getUserAttributes: (row) => ({ email: row.email, name: row.name, isAdmin: row.isAdmin, disabledAt: row.disabledAt }),
	});
}

declare module 'lucia' {
	interface Register {
		Lucia: ReturnType<typeof luciaOver>;
		DatabaseSessionAttributes: { createdAt?: Date; ip: string | null; userAgent: string | null };
		DatabaseUserAttributes: { email: string; name: string; isAdmin: boolean; disabledAt: Date | null };
	}
}

/** `__Host-` binds the cookie to this host and to https [RFC 6265bis §4.1.3.2]; on plain http a browser would drop such a cookie. */
export function sessionCookieName(url: URL): string {
	return url.protocol === 'https:' ? '__Host-millrace_session' : 'millrace_session';
}

export interface Visit {
	cookies: Cookies;
	url: URL;
	ip: string;
	userAgent: string | null;
}

/** Begins a session for a person who has just proved who they are. The token is new each time and is nowhere stored as it is. */
export async function startSession(db: Db, userId: string, visit: Visit): Promise<void> {
	const old = visit.cookies.get(sessionCookieName(visit.url));
	if (old) await endSession(db, hashToken(old));
	const token = newToken();
	await luciaOver(db).createSession(
		userId,
		{ ip: visit.ip, userAgent: visit.userAgent?.slice(0, 300) ?? null },
		{ sessionId: hashToken(token) },
	);
	setCookie(visit, token);
}

function setCookie({ cookies, url }: Pick<Visit, 'cookies' | 'url'>, token: string): void {
	cookies.set(sessionCookieName(url), token, {
		path: '/',
		httpOnly: true,
		sameSite: 'lax',
		secure: url.protocol === 'https:',
		maxAge: IDLE.seconds(),
	});
}

/** The person of the request's cookie, with roles by site slug; slides the session on. Null where there is none, it ended, or the person is disabled. */
export async function findSession(
	db: Db,
	visit: Pick<Visit, 'cookies' | 'url'>,
): Promise<{ person: Person; sessionId: string } | null> {
	const token = visit.cookies.get(sessionCookieName(visit.url));
	if (!token) return null;
	const { session, user } = await luciaOver(db).validateSession(hashToken(token));
	const isOver = !session || !user || user.disabledAt !== null || Date.now() - (session.createdAt?.getTime() ?? 0) > LONGEST_MS;
	if (isOver) {
		if (session) await endSession(db, session.id);
		forgetCookie(visit);
		return null;
	}
	if (session.fresh) setCookie(visit, token);
	return { person: { kind: 'person', ...(await readPerson(db, user)) }, sessionId: session.id };
}

async function readPerson(
	db: Db,
	user: { id: string; email: string; name: string; isAdmin: boolean },
): Promise<Omit<Person, 'kind'>> {
	const granted = await db
		.select({ slug: sites.slug, role: siteRoles.role })
		.from(siteRoles)
		.innerJoin(sites, eq(sites.id, siteRoles.siteId))
		.where(eq(siteRoles.userId, user.id));
	const roles: Record<string, SiteRole> = Object.fromEntries(granted.map(({ slug, role }) => [slug, role]));
	return { id: user.id, name: user.name, email: user.email, isAdmin: user.isAdmin, roles };
}

/** Takes the cookie back. */
export function forgetCookie({ cookies, url }: Pick<Visit, 'cookies' | 'url'>): void {
	cookies.delete(sessionCookieName(url), { path: '/', secure: url.protocol === 'https:' });
}

/** Ends one session on the server. */
export async function endSession(db: Db, sessionId: string): Promise<void> {
	await luciaOver(db).invalidateSession(sessionId);
}

/** Ends every session of a person: sign out everywhere, a new password, a disabled account. */
export async function endAllSessions(db: Db, userId: string): Promise<void> {
	await luciaOver(db).invalidateUserSessions(userId);
}

/** Removes sessions that ran out; housekeeping. */
export async function removeOldSessions(db: Db): Promise<void> {
	await luciaOver(db).deleteExpiredSessions();
}
