// Schema. May touch: drizzle-orm and other schema files only.
import { sql } from 'drizzle-orm';
import { boolean, integer, pgTable, primaryKey, text, timestamp, uniqueIndex, uuid } from 'drizzle-orm/pg-core';
import { sites } from './site.ts';

const at = (name: string) => timestamp(name, { withTimezone: true, mode: 'date' });

export const users = pgTable(
	'users',
	{
		id: text('id').primaryKey(),
		email: text('email').notNull(),
		name: text('name').notNull(),
		/** argon2id, encoded; null until an invitation is taken up. */
		passwordHash: text('password_hash'),
		isAdmin: boolean('is_admin').notNull().default(false),
		disabledAt: at('disabled_at'),
		createdAt: at('created_at').notNull().defaultNow(),
		/** Display units, theme, columns: things of the person, not of the plant. */
		preferences: text('preferences').notNull().default('{}'),
	},
	(t) => [uniqueIndex('users_one_per_email').on(sql`lower(${t.email})`)],
);

export const siteRoles = pgTable(
	'site_roles',
	{
		userId: text('user_id')
			.notNull()
			.references(() => users.id),
		siteId: integer('site_id')
			.notNull()
			.references(() => sites.id),
		role: text('role', { enum: ['integrator', 'controls', 'maintenance', 'analyst', 'viewer'] }).notNull(),
	},
	(t) => [primaryKey({ columns: [t.userId, t.siteId] })],
);

/** `id` is the SHA-256 of the token that the cookie carries: a copy of this table opens no session. */
export const sessions = pgTable('sessions', {
	id: text('id').primaryKey(),
	userId: text('user_id')
		.notNull()
		.references(() => users.id),
	expiresAt: at('expires_at').notNull(),
	createdAt: at('created_at').notNull().defaultNow(),
	ip: text('ip'),
	userAgent: text('user_agent'),
});

/** Invitations and password resets: single use, stored hashed. */
export const oneTimeTokens = pgTable('one_time_tokens', {
	id: text('id').primaryKey(),
	kind: text('kind', { enum: ['invite', 'reset'] }).notNull(),
	userId: text('user_id')
		.notNull()
		.references(() => users.id),
	expiresAt: at('expires_at').notNull(),
	usedAt: at('used_at'),
	createdAt: at('created_at').notNull().defaultNow(),
});

export const apiKeys = pgTable(
	'api_keys',
	{
		id: uuid('id').primaryKey().defaultRandom(),
		name: text('name').notNull(),
		/** SHA-256 of the whole key; the key itself is shown once. */
		keyHash: text('key_hash').notNull(),
		/** First characters, to tell keys apart in a list. */
		prefix: text('prefix').notNull(),
		scopes: text('scopes').array().notNull(),
		expiresAt: at('expires_at'),
		revokedAt: at('revoked_at'),
		lastUsedAt: at('last_used_at'),
		lastUsedIp: text('last_used_ip'),
		createdBy: text('created_by'),
		createdAt: at('created_at').notNull().defaultNow(),
	},
	(t) => [
		uniqueIndex('api_keys_by_hash').on(t.keyHash),
		uniqueIndex('api_keys_one_live_name')
			.on(sql`lower(${t.name})`)
			.where(sql`revoked_at is null`),
	],
);

export const apiKeySites = pgTable(
	'api_key_sites',
	{
		keyId: uuid('key_id')
			.notNull()
			.references(() => apiKeys.id),
		siteId: integer('site_id')
			.notNull()
			.references(() => sites.id),
	},
	(t) => [primaryKey({ columns: [t.keyId, t.siteId] })],
);
