// Schema. May touch: drizzle-orm and other schema files only.
import { bigint, index, integer, jsonb, pgTable, text, timestamp } from 'drizzle-orm/pg-core';

const at = (name: string) => timestamp(name, { withTimezone: true, mode: 'date' });

/** Who changed what, when, from where, before and after. The application's database role may only insert and select. */
export const auditEntries = pgTable(
	'audit_entries',
	{
		id: bigint('id', { mode: 'number' }).primaryKey().generatedAlwaysAsIdentity(),
		at: at('at').notNull().defaultNow(),
		siteId: integer('site_id'),
		actorKind: text('actor_kind', { enum: ['person', 'key', 'system', 'command'] }).notNull(),
		actorId: text('actor_id'),
		actorName: text('actor_name').notNull(),
		ip: text('ip'),
		/** Past-tense word: `source.created`, `limit.changed`, `alarm.acknowledged`. */
		action: text('action').notNull(),
		subjectKind: text('subject_kind').notNull(),
		subjectId: text('subject_id'),
		subjectName: text('subject_name'),
		before: jsonb('before'),
		after: jsonb('after'),
		note: text('note'),
	},
	(t) => [index('audit_by_site_and_time').on(t.siteId, t.id.desc())],
);

/** Mail, text messages and webhooks to send; claimed with skip locked, delivered at least once. */
export const outbox = pgTable(
	'outbox',
	{
		id: bigint('id', { mode: 'number' }).primaryKey().generatedAlwaysAsIdentity(),
		channel: text('channel', { enum: ['mail', 'text', 'webhook'] }).notNull(),
		target: text('target').notNull(),
		payload: jsonb('payload').$type<Record<string, unknown>>().notNull(),
		state: text('state', { enum: ['waiting', 'sent', 'failed'] })
			.notNull()
			.default('waiting'),
		attempts: integer('attempts').notNull().default(0),
		nextAt: at('next_at').notNull().defaultNow(),
		createdAt: at('created_at').notNull().defaultNow(),
		sentAt: at('sent_at'),
		lastError: text('last_error'),
	},
	(t) => [index('outbox_waiting').on(t.nextAt)],
);
