// Edge: identity. May touch: user, session, role and key tables; cookies.
import { and, asc, eq, isNull, like } from 'drizzle-orm';
import { ok, refuse, type Outcome } from '#lib/domain/outcome.ts';
import type { Config } from '#lib/server/config.ts';
import type { Db } from '#lib/server/db/pool.ts';
import { installation } from '#lib/server/db/schema/site.ts';
import { siteRoles, users } from '#lib/server/db/schema/user.ts';
import type { Visit } from './session.ts';
import { beginFor } from './sign-in.ts';

/** Demo people live under this name, which can never be anybody's real address [RFC 2606 §2]. */
export const DEMO_DOMAIN = '@demo.invalid';

const LOOPBACK = /^(127(\.\d{1,3}){3}|::1|::ffff:127(\.\d{1,3}){3})$/;

/** True where entering without a password is offered: a demo installation, served on loopback, asked from loopback. */
export function isDemoEntryOpen(config: Pick<Config, 'isDemo' | 'host'>, ip: string): boolean {
	return config.isDemo && (config.host === 'localhost' || LOOPBACK.test(config.host)) && LOOPBACK.test(ip);
}

/** The people that can be entered as, with their role; empty where that is not offered. */
export async function listDemoPeople(
	db: Db,
	config: Pick<Config, 'isDemo' | 'host'>,
	ip: string,
): Promise<{ id: string; name: string; role: string }[]> {
	if (!isDemoEntryOpen(config, ip)) return [];
	const rows = await db
		.selectDistinctOn([users.id], {
			id: users.id,
			name: users.name,
			isAdmin: users.isAdmin,
			role: siteRoles.role,
			createdAt: users.createdAt,
		})
		.from(users)
		.leftJoin(siteRoles, eq(siteRoles.userId, users.id))
		.where(and(like(users.email, `%${DEMO_DOMAIN}`), isNull(users.disabledAt)))
		.orderBy(asc(users.id));
	const order = ['integrator', 'controls', 'maintenance', 'analyst', 'viewer', 'admin'];
	return rows
		.map(({ id, name, isAdmin, role }) => ({ id, name, role: isAdmin ? 'admin' : (role ?? 'viewer') }))
		.sort((a, b) => order.indexOf(a.role) - order.indexOf(b.role) || a.name.localeCompare(b.name));
}

/** Signs in as a demo person without a password. Refusals: 'not-offered' anywhere but in a demo on loopback. */
export async function enterAs(
	db: Db,
	config: Pick<Config, 'isDemo' | 'host'>,
	userId: string,
	visit: Visit,
): Promise<Outcome<{ userId: string }, 'not-offered'>> {
	if (!isDemoEntryOpen(config, visit.ip)) return refuse('not-offered');
	const [state] = await db.select({ isDemo: installation.isDemo }).from(installation);
	const [user] = await db
		.select()
		.from(users)
		.where(and(eq(users.id, userId), like(users.email, `%${DEMO_DOMAIN}`), isNull(users.disabledAt)));
	// The setting alone is not believed: the database must have been laid as a demo too.
	if (!state?.isDemo || !user) return refuse('not-offered');
	await beginFor(db, user, visit);
	return ok({ userId: user.id });
}
