// Edge: people. May touch: user, session and role tables; outbox.
import { and, eq, isNull, ne, sql } from 'drizzle-orm';
import type { Db } from '#lib/server/db/pool.ts';
import { users } from '#lib/server/db/schema/user.ts';

/** True when no other administrator who can sign in would be left. Call it in the transaction that takes the right away. */
export async function isLastAdmin(db: Db, userId: string): Promise<boolean> {
	// Two administrators who demote each other at once take turns here.
	await db.execute(sql`select pg_advisory_xact_lock(hashtext('administrators'))`);
	const [other] = await db
		.select({ id: users.id })
		.from(users)
		.where(and(ne(users.id, userId), eq(users.isAdmin, true), isNull(users.disabledAt)))
		.limit(1);
	return other === undefined;
}
