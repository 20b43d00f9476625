// Edge: people. May touch: user, session and role tables; outbox.
import { randomUUID } from 'node:crypto';
import { eq, sql } from 'drizzle-orm';
import type { SiteRole } from '#lib/domain/access/role.ts';
import { ok, refuse, type Outcome } from '#lib/domain/outcome.ts';
import { recordAudit, type AuditActor } from '#lib/server/audit/record.ts';
import type { Db, Pool } from '#lib/server/db/pool.ts';
import { users } from '#lib/server/db/schema/user.ts';
import { inTransaction } from '#lib/server/db/transaction.ts';
import { createLink } from '#lib/server/identity/one-time-link.ts';
import { enqueueMail } from '#lib/server/outbox/enqueue.ts';
import { writeRoles } from './change-roles.ts';

export interface InviteInput {
	email: string;
	name: string;
	/** Role by site slug. */
	roles: Readonly<Record<string, SiteRole>>;
	isAdmin: boolean;
	/** Where the link leads: the installation's own address. */
	origin: string;
	actor: AuditActor;
	ip: string | null;
}

/**
 * Adds a person and sends them a link to choose a password. The link is answered too, for installations without a mail server.
 * Refusals: 'email-taken'; 'site-not-found' with the slug.
 */
export async function invitePerson(
	pool: Pool,
	input: InviteInput,
): Promise<Outcome<{ id: string; link: string }, 'email-taken' | 'site-not-found'>> {
	return inTransaction(pool, async (db) => {
		const id = randomUUID();
		const [row] = await db
			.insert(users)
			.values({ id, email: input.email.trim(), name: input.name.trim(), isAdmin: input.isAdmin })
			.onConflictDoNothing()
			.returning();
		if (!row) return refuse('email-taken');
		const missing = await writeRoles(db, id, input.roles);
		if (missing !== null) {
			// Nothing of a refused invitation may stay.
			await db.delete(users).where(eq(users.id, id));
			return refuse('site-not-found', missing);
		}
		await recordAudit(db, {
			siteId: null,
			actor: input.actor,
			ip: input.ip,
			action: 'person.invited',
			subjectKind: 'person',
			subjectId: id,
			subjectName: row.name,
			after: { email: row.email, name: row.name, admin: row.isAdmin, roles: input.roles },
		});
		return ok({ id, link: await sendInvitation(db, row, input.origin) });
	});
}

/** Sends the link again, with a new token; the old one stops working. Refusals: 'person-not-found'; 'already-taken' once a password is set. */
export async function inviteAgain(
	pool: Pool,
	id: string,
	by: { origin: string; actor: AuditActor; ip: string | null },
): Promise<Outcome<{ link: string }, 'person-not-found' | 'already-taken'>> {
	return inTransaction(pool, async (db) => {
		const [user] = await db.select().from(users).where(eq(users.id, id));
		if (!user || user.disabledAt) return refuse('person-not-found');
		if (user.passwordHash) return refuse('already-taken');
		await recordAudit(db, {
			siteId: null,
			actor: by.actor,
			ip: by.ip,
			action: 'person.invited-again',
			subjectKind: 'person',
			subjectId: id,
			subjectName: user.name,
		});
		return ok({ link: await sendInvitation(db, user, by.origin) });
	});
}

async function sendInvitation(db: Db, user: { id: string; email: string; name: string }, origin: string): Promise<string> {
	const link = `${origin}/invite/${await createLink(db, 'invite', user.id)}`;
	await enqueueMail(db, user.email, {
		subject: 'Your access to Millrace',
		text: `Hello ${user.name},\n\nyou have been given access to Millrace. Choose a password here; the link works once, for seven days:\n\n${link}\n`,
	});
	return link;
}

/** The person of that address, or null. */
export async function findPersonByEmail(db: Db, email: string): Promise<typeof users.$inferSelect | null> {
	const [user] = await db
		.select()
		.from(users)
		.where(sql`lower(${users.email}) = lower(${email.trim()})`);
	return user ?? null;
}
