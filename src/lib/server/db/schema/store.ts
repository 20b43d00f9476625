// Schema. May touch: drizzle-orm and other schema files only.
import { sql } from 'drizzle-orm';
import { bigint, boolean, check, date, integer, pgTable, text, timestamp, unique } from 'drizzle-orm/pg-core';
import { sites } from './site.ts';

const at = (name: string) => timestamp(name, { withTimezone: true, mode: 'date' });

/** How long raw readings of a site, a quantity or both are kept, where it is not the installation's default. Blocks are kept apart by rule, so that retention drops whole tables. */
export const retentionRules = pgTable(
	'retention_rules',
	{
		/** Also the group of the blocks; 0 is the installation's default and no row. */
		id: integer('id').primaryKey().generatedAlwaysAsIdentity(),
		/** Null for every site. */
		siteId: integer('site_id').references(() => sites.id),
		/** Null for every quantity. */
		quantity: text('quantity'),
		rawDays: integer('raw_days').notNull(),
		updatedAt: at('updated_at').notNull().defaultNow(),
	},
	(t) => [
		unique('retention_rules_one_each').on(t.siteId, t.quantity).nullsNotDistinct(),
		check('retention_rules_say_something', sql`${t.siteId} IS NOT NULL OR ${t.quantity} IS NOT NULL`),
		check('retention_rules_days', sql`${t.rawDays} BETWEEN 3 AND 36500`),
	],
);

/** One row: how far packing has come. Readers and writers look here, so that a day changes from rows to blocks in one commit. */
export const packingState = pgTable(
	'packing_state',
	{
		id: integer('id').primaryKey().default(1),
		/** Readings before it are blocks (or late rows); rows of days before it are no longer read. */
		packedUntil: at('packed_until')
			.notNull()
			.default(sql`'-infinity'`),
		/** Readings before it are written as late rows, never into a day's partition; ahead of `packed_until` while a day is being packed. */
		closedUntil: at('closed_until')
			.notNull()
			.default(sql`'-infinity'`),
		/** Last tag of the day in work whose blocks are written. */
		doneTag: integer('done_tag').notNull().default(0),
		/** Work on the day so far, without rests. */
		workMs: bigint('work_ms', { mode: 'number' }).notNull().default(0),
		/** Set when rules change: blocks packed under another rule are to be moved. */
		mustRegroup: boolean('must_regroup').notNull().default(false),
		startedAt: at('started_at'),
		finishedAt: at('finished_at'),
		error: text('error'),
	},
	(t) => [check('packing_state_is_single', sql`${t.id} = 1`)],
);

/** What packing made of a day. */
export const packedDays = pgTable('packed_days', {
	day: date('day').primaryKey(),
	readings: bigint('readings', { mode: 'number' }).notNull(),
	blocks: integer('blocks').notNull(),
	bytes: bigint('bytes', { mode: 'number' }).notNull(),
	workMs: bigint('work_ms', { mode: 'number' }).notNull(),
	packedAt: at('packed_at').notNull().defaultNow(),
});
