// Edge: identity. May touch: user, session, role and key tables; cookies.
import { and, asc, eq, inArray, isNull, sql } from 'drizzle-orm';
import type { Actor } from '#lib/domain/access/can.ts';
import type { KeyScope } from '#lib/domain/access/role.ts';
import { ok, refuse, type Outcome } from '#lib/domain/outcome.ts';
import { recordAudit, type AuditActor } from '#lib/server/audit/record.ts';
import type { Db, Pool } from '#lib/server/db/pool.ts';
import { sites } from '#lib/server/db/schema/site.ts';
import { apiKeys, apiKeySites } from '#lib/server/db/schema/user.ts';
import { inTransaction } from '#lib/server/db/transaction.ts';
import { hashToken, newToken } from './secret-token.ts';

/** Says whose a found key is, to people and to scanners of leaked secrets. */
const PREFIX = 'mr_';
const KEY_FORM = /^mr_[A-Za-z0-9_-]{32}$/;

export interface KeyInput {
	name: string;
	/** Slugs. */
	sites: readonly string[];
	scopes: readonly KeyScope[];
	expiresAt: Date | null;
	actor: AuditActor;
	ip: string | null;
}

export interface KeyRow {
	id: string;
	name: string;
	prefix: string;
	scopes: KeyScope[];
	sites: string[];
	expiresAt: Date | null;
	revokedAt: Date | null;
	lastUsedAt: Date | null;
	lastUsedIp: string | null;
	createdBy: string | null;
	createdAt: Date;
}

/**
 * Makes a key; the answer is the only time that it is seen.
 * Refusals: 'name-taken' while another live key has the name; 'site-not-found' with the slug.
 */
export async function createKey(
	pool: Pool,
	input: KeyInput,
): Promise<Outcome<{ id: string; key: string }, 'name-taken' | 'site-not-found'>> {
	const key = PREFIX + newToken();
	return inTransaction(pool, async (db) => {
		const found =
			input.sites.length === 0
				? []
				: await db
						.select()
						.from(sites)
						.where(inArray(sites.slug, [...input.sites]));
		const missing = input.sites.find((slug) => !found.some((site) => site.slug === slug));
		if (missing !== undefined) return refuse('site-not-found', missing);
		const [row] = await db
			.insert(apiKeys)
			.values({
				name: input.name,
				keyHash: hashToken(key),
				prefix: key.slice(0, 8),
				scopes: [...input.scopes],
				expiresAt: input.expiresAt,
				createdBy: input.actor.name,
			})
			.onConflictDoNothing()
			.returning({ id: apiKeys.id });
		if (!row) return refuse('name-taken', input.name);
		if (found.length > 0) await db.insert(apiKeySites).values(found.map((site) => ({ keyId: row.id, siteId: site.id })));
		await recordAudit(db, {
			siteId: found.length === 1 ? (found[0]?.id ?? null) : null,
			actor: input.actor,
			ip: input.ip,
			action: 'key.created',
			subjectKind: 'key',
			subjectId: row.id,
			subjectName: input.name,
			after: { name: input.name, sites: input.sites, scopes: input.scopes, expires_at: input.expiresAt },
		});
		return ok({ id: row.id, key });
	});
}

/** Ends a key at once. Refusals: 'key-not-found' for an unknown or already revoked one. */
export async function revokeKey(
	pool: Pool,
	id: string,
	by: { actor: AuditActor; ip: string | null; siteId?: number | null },
): Promise<Outcome<{ id: string; name: string }, 'key-not-found'>> {
	return inTransaction(pool, async (db) => {
		const [row] = await db
			.update(apiKeys)
			.set({ revokedAt: new Date() })
			.where(and(sql`${apiKeys.id}::text = ${id}`, isNull(apiKeys.revokedAt)))
			.returning({ id: apiKeys.id, name: apiKeys.name });
		if (!row) return refuse('key-not-found');
		await recordAudit(db, {
			siteId: by.siteId ?? null,
			actor: by.actor,
			ip: by.ip,
			action: 'key.revoked',
			subjectKind: 'key',
			subjectId: row.id,
			subjectName: row.name,
		});
		return ok(row);
	});
}

/** The live key of that name, or null. */
export async function findKeyByName(db: Db, name: string): Promise<{ id: string } | null> {
	const [row] = await db
		.select({ id: apiKeys.id })
		.from(apiKeys)
		.where(and(sql`lower(${apiKeys.name}) = lower(${name})`, isNull(apiKeys.revokedAt)));
	return row ?? null;
}

/** Keys, live ones first by name; of one site, or all. */
export async function listKeys(db: Db, siteId?: number): Promise<KeyRow[]> {
	const rows = await db
		.select({
			id: apiKeys.id,
			name: apiKeys.name,
			prefix: apiKeys.prefix,
			scopes: apiKeys.scopes,
			expiresAt: apiKeys.expiresAt,
			revokedAt: apiKeys.revokedAt,
			lastUsedAt: apiKeys.lastUsedAt,
			lastUsedIp: apiKeys.lastUsedIp,
			createdBy: apiKeys.createdBy,
			createdAt: apiKeys.createdAt,
			sites: sql<
				string[]
			>`array(select s.slug from api_key_sites ks join sites s on s.id = ks.site_id where ks.key_id = "api_keys"."id" order by 1)`,
		})
		.from(apiKeys)
		.where(
			siteId === undefined
				? undefined
				: sql`exists (select from api_key_sites ks where ks.key_id = "api_keys"."id" and ks.site_id = ${siteId})`,
		)
		.orderBy(sql`${apiKeys.revokedAt} is not null`, asc(sql`lower(${apiKeys.name})`));
	return rows.map((row) => ({ ...row, scopes: row.scopes as KeyScope[] }));
}

/** The key that the header's text names, as who asks; null when it is unknown, revoked or over. Notes its use at most once a minute. */
export async function findKeyActor(db: Db, key: string, ip: string): Promise<Extract<Actor, { kind: 'key' }> | null> {
	if (!KEY_FORM.test(key)) return null;
	const [row] = await db
		.select({
			id: apiKeys.id,
			name: apiKeys.name,
			scopes: apiKeys.scopes,
			isUseOld: sql<boolean>`${apiKeys.lastUsedAt} is null or ${apiKeys.lastUsedAt} < now() - interval '1 minute'`,
			sites: sql<
				string[]
			>`array(select s.slug from api_key_sites ks join sites s on s.id = ks.site_id where ks.key_id = "api_keys"."id")`,
		})
		.from(apiKeys)
		.where(
			and(
				eq(apiKeys.keyHash, hashToken(key)),
				isNull(apiKeys.revokedAt),
				sql`(${apiKeys.expiresAt} is null or ${apiKeys.expiresAt} > now())`,
			),
		);
	if (!row) return null;
	if (row.isUseOld) await db.update(apiKeys).set({ lastUsedAt: new Date(), lastUsedIp: ip }).where(eq(apiKeys.id, row.id));
	return { kind: 'key', id: row.id, name: row.name, scopes: row.scopes as KeyScope[], sites: row.sites };
}
