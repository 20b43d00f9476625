// Edge: people. May touch: user, session and role tables; outbox.
import { eq, inArray } from 'drizzle-orm';
import type { SiteRole } from '#lib/domain/access/role.ts';
import { ok, refuse, type Outcome } from '#lib/domain/outcome.ts';
import { recordAudit, type AuditActor } from '#lib/server/audit/record.ts';
import type { Db, Pool } from '#lib/server/db/pool.ts';
import { sites } from '#lib/server/db/schema/site.ts';
import { siteRoles, users } from '#lib/server/db/schema/user.ts';
import { inTransaction } from '#lib/server/db/transaction.ts';
import { isLastAdmin } from './last-admin.ts';

/** Replaces a person's roles, in the caller's transaction. Answers a slug that no site has, or null. */
export async function writeRoles(db: Db, userId: string, roles: Readonly<Record<string, SiteRole>>): Promise<string | null> {
	const slugs = Object.keys(roles);
	const found =
		slugs.length === 0 ? [] : await db.select({ id: sites.id, slug: sites.slug }).from(sites).where(inArray(sites.slug, slugs));
	const missing = slugs.find((slug) => !found.some((site) => site.slug === slug));
	if (missing !== undefined) return missing;
	await db.delete(siteRoles).where(eq(siteRoles.userId, userId));
	const rows = found.flatMap(({ id, slug }) => {
		const role = roles[slug];
		return role ? [{ userId, siteId: id, role }] : [];
	});
	if (rows.length > 0) await db.insert(siteRoles).values(rows);
	return null;
}

/** A person's role by site slug. */
export async function readRoles(db: Db, userId: string): Promise<Record<string, SiteRole>> {
	const rows = await db
		.select({ slug: sites.slug, role: siteRoles.role })
		.from(siteRoles)
		.innerJoin(sites, eq(sites.id, siteRoles.siteId))
		.where(eq(siteRoles.userId, userId));
	return Object.fromEntries(rows.map(({ slug, role }) => [slug, role]));
}

/**
 * Replaces a person's roles at every site, and whether they are an administrator.
 * Refusals: 'person-not-found'; 'site-not-found' with the slug; 'last-admin' where nobody would be left to give rights.
 */
export async function changeRoles(
	pool: Pool,
	input: { id: string; roles: Readonly<Record<string, SiteRole>>; isAdmin: boolean; actor: AuditActor; ip: string | null },
): Promise<Outcome<null, 'person-not-found' | 'site-not-found' | 'last-admin'>> {
	return inTransaction(pool, async (db) => {
		const [user] = await db.select().from(users).where(eq(users.id, input.id)).for('update');
		if (!user) return refuse('person-not-found');
		if (user.isAdmin && !input.isAdmin && (await isLastAdmin(db, user.id))) return refuse('last-admin');
		const before = await readRoles(db, user.id);
		const slugs = Object.keys(input.roles);
		const known = slugs.length === 0 ? [] : await db.select({ slug: sites.slug }).from(sites).where(inArray(sites.slug, slugs));
		const missing = slugs.find((slug) => !known.some((site) => site.slug === slug));
		if (missing !== undefined) return refuse('site-not-found', missing);
		await writeRoles(db, user.id, input.roles);
		await db.update(users).set({ isAdmin: input.isAdmin }).where(eq(users.id, user.id));
		await recordAudit(db, {
			siteId: null,
			actor: input.actor,
			ip: input.ip,
			action: 'person.roles-changed',
			subjectKind: 'person',
			subjectId: user.id,
			subjectName: user.name,
			before: { admin: user.isAdmin, roles: before },
			after: { admin: input.isAdmin, roles: input.roles },
		});
		return ok(null);
	});
}
