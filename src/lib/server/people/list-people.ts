// Edge: people. May touch: user, session and role tables; outbox.
import { asc, eq, sql } from 'drizzle-orm';
import type { SiteRole } from '#lib/domain/access/role.ts';
import type { Db } from '#lib/server/db/pool.ts';
import { sites } from '#lib/server/db/schema/site.ts';
import { siteRoles, users } from '#lib/server/db/schema/user.ts';

export interface PersonRow {
	id: string;
	name: string;
	email: string;
	isAdmin: boolean;
	/** `invited`: has not chosen a password yet. */
	state: 'active' | 'invited' | 'disabled';
	/** Role by site slug. */
	roles: Record<string, SiteRole>;
	/** Start of the newest session still standing. */
	lastSignInAt: Date | null;
	createdAt: Date;
}

/** Everybody, by name. */
export async function listPeople(db: Db): Promise<PersonRow[]> {
	const people = await db
		.select({
			id: users.id,
			name: users.name,
			email: users.email,
			isAdmin: users.isAdmin,
			hasPassword: sql<boolean>`${users.passwordHash} is not null`,
			disabledAt: users.disabledAt,
			createdAt: users.createdAt,
			lastSignInAt: sql<Date | null>`(select max(created_at) from sessions where sessions.user_id = "users"."id")`.mapWith(
				(value: string | Date) => new Date(value),
			),
		})
		.from(users)
		.orderBy(asc(sql`lower(${users.name})`));
	const granted = await db
		.select({ userId: siteRoles.userId, slug: sites.slug, role: siteRoles.role })
		.from(siteRoles)
		.innerJoin(sites, eq(sites.id, siteRoles.siteId));
	const roles = new Map<string, Record<string, SiteRole>>();
	for (const { userId, slug, role } of granted) roles.set(userId, { ...roles.get(userId), [slug]: role });
	return people.map(({ hasPassword, disabledAt, ...person }) => ({
		...person,
		state: disabledAt ? 'disabled' : hasPassword ? 'active' : 'invited',
		roles: roles.get(person.id) ?? {},
	}));
}
