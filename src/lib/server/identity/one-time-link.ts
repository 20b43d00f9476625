// Edge: identity. May touch: user, session, role and key tables; cookies.
import { and, eq, gt, isNull, sql } from 'drizzle-orm';
import type { Db } from '#lib/server/db/pool.ts';
import { oneTimeTokens, users } from '#lib/server/db/schema/user.ts';
import { hashToken, newToken } from './secret-token.ts';

export type LinkKind = 'invite' | 'reset';

const LIVES_MS: Readonly<Record<LinkKind, number>> = { invite: 7 * 86_400_000, reset: 3_600_000 };

/** The token of a link that works once; older links of the same kind and person stop working. */
export async function createLink(db: Db, kind: LinkKind, userId: string): Promise<string> {
	await db
		.update(oneTimeTokens)
		.set({ usedAt: new Date() })
		.where(and(eq(oneTimeTokens.userId, userId), eq(oneTimeTokens.kind, kind), isNull(oneTimeTokens.usedAt)));
	const token = newToken();
	await db.insert(oneTimeTokens).values({ id: hashToken(token), kind, userId, expiresAt: new Date(Date.now() + LIVES_MS[kind]) });
	return token;
}

const isLive = (kind: LinkKind, token: string) =>
	and(
		eq(oneTimeTokens.id, hashToken(token)),
		eq(oneTimeTokens.kind, kind),
		isNull(oneTimeTokens.usedAt),
		gt(oneTimeTokens.expiresAt, sql`now()`),
	);

/** Whose link it is, without using it up; null when it is used, over or unknown. */
export async function findLinkPerson(db: Db, kind: LinkKind, token: string): Promise<typeof users.$inferSelect | null> {
	const [row] = await db
		.select({ user: users })
		.from(oneTimeTokens)
		.innerJoin(users, eq(users.id, oneTimeTokens.userId))
		.where(and(isLive(kind, token), isNull(users.disabledAt)));
	return row?.user ?? null;
}

/** Uses the link up; of two at once only one gets the person's id. */
export async function useLink(db: Db, kind: LinkKind, token: string): Promise<string | null> {
	const [row] = await db
		.update(oneTimeTokens)
		.set({ usedAt: new Date() })
		.where(isLive(kind, token))
		.returning({ userId: oneTimeTokens.userId });
	return row?.userId ?? null;
}
