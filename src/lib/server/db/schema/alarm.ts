// Schema. May touch: drizzle-orm and other schema files only.
import { sql } from 'drizzle-orm';
import {
	bigint,
	boolean,
	check,
	doublePrecision,
	index,
	integer,
	jsonb,
	pgTable,
	text,
	timestamp,
	uniqueIndex,
	uuid,
} from 'drizzle-orm/pg-core';
import { sites } from './site.ts';
import { sources } from './source.ts';
import { limits, tags } from './tag-map.ts';

const at = (name: string) => timestamp(name, { withTimezone: true, mode: 'date' });

/** One excursion of one tag in one direction, or of one source's connection, from raise to clear. It escalates in place; rows are never deleted. */
export const alarms = pgTable(
	'alarms',
	{
		id: bigint('id', { mode: 'number' }).primaryKey().generatedAlwaysAsIdentity(),
		siteId: integer('site_id')
			.notNull()
			.references(() => sites.id),
		/** Null for a connection alarm. */
		tagId: integer('tag_id').references(() => tags.id),
		/** Set for a connection alarm: the source that is lost. */
		sourceId: uuid('source_id').references(() => sources.id),
		direction: text('direction', { enum: ['up', 'down', 'state', 'stale', 'connection'] }).notNull(),
		kind: text('kind', { enum: ['high', 'low', 'rate', 'deviation', 'stale', 'state', 'connection'] }).notNull(),
		/** Highest level reached; `levelNow` follows the readings. */
		level: text('level', { enum: ['alert', 'danger'] }).notNull(),
		levelNow: text('level_now', { enum: ['alert', 'danger'] }),
		raisedValue: doublePrecision('raised_value'),
		/** The reading that raised it was uncertain. */
		isUncertain: boolean('is_uncertain').notNull().default(false),
		/** Found behind live data: recorded, nobody is called. */
		isLate: boolean('is_late').notNull().default(false),
		isTest: boolean('is_test').notNull().default(false),
		raisedAt: at('raised_at').notNull(),
		escalatedAt: at('escalated_at'),
		clearedAt: at('cleared_at'),
		acknowledgedAt: at('acknowledged_at'),
		acknowledgedBy: text('acknowledged_by'),
		acknowledgeNote: text('acknowledge_note'),
		/** The limit that it met, as it stood then. */
		limitId: integer('limit_id').references(() => limits.id),
		/** Stale alarms suppressed as a consequence of this connection alarm. */
		suppressedCount: integer('suppressed_count').notNull().default(0),
		recordedAt: at('recorded_at').notNull().defaultNow(),
	},
	(t) => [
		// After a restart the collector may judge the same excursion again; these keep it single.
		uniqueIndex('alarms_one_open_per_tag_and_direction')
			.on(t.tagId, t.direction, t.isTest)
			.where(sql`cleared_at is null and tag_id is not null`),
		uniqueIndex('alarms_one_open_per_source')
			.on(t.sourceId)
			.where(sql`cleared_at is null and source_id is not null`),
		uniqueIndex('alarms_same_excursion_once')
			.on(t.tagId, t.direction, t.isTest, t.raisedAt)
			.where(sql`tag_id is not null`),
		index('alarms_by_site_and_time').on(t.siteId, t.raisedAt.desc(), t.id.desc()),
		index('alarms_by_tag_and_time').on(t.tagId, t.raisedAt.desc()),
		check('alarms_cleared_after_raised', sql`cleared_at is null or cleared_at >= raised_at`),
		check('alarms_of_tag_or_source', sql`(tag_id is null) <> (source_id is null)`),
	],
);

/** What happened to an alarm, in order. */
export const alarmEvents = pgTable(
	'alarm_events',
	{
		id: bigint('id', { mode: 'number' }).primaryKey().generatedAlwaysAsIdentity(),
		alarmId: bigint('alarm_id', { mode: 'number' })
			.notNull()
			.references(() => alarms.id),
		at: at('at').notNull(),
		kind: text('kind', {
			enum: [
				'raised',
				'escalated',
				'stepped-down',
				'cleared',
				'acknowledged',
				'shelved',
				'unshelved',
				'out-of-service',
				'returned-to-service',
			],
		}).notNull(),
		level: text('level'),
		value: doublePrecision('value'),
		by: text('by'),
		note: text('note'),
	},
	(t) => [index('alarm_events_by_alarm').on(t.alarmId)],
);

/** Shelved until, suppressed and out of service are the tag's, not the alarm's. */
export const tagStates = pgTable('tag_states', {
	tagId: integer('tag_id')
		.primaryKey()
		.references(() => tags.id),
	shelvedUntil: at('shelved_until'),
	shelvedBy: text('shelved_by'),
	shelvedNote: text('shelved_note'),
	/** Judged all the same; nobody is called, and what it raises is marked. */
	outOfServiceUntil: at('out_of_service_until'),
	outOfServiceBy: text('out_of_service_by'),
	outOfServiceNote: text('out_of_service_note'),
	/** Suppressed as a consequence of a lost source. */
	suppressedBy: uuid('suppressed_by'),
});

/** What evaluation must remember of a tag between readings (pending delays, runs, last judged time), written with the readings that made it. */
export const judgingStates = pgTable('judging_states', {
	tagId: integer('tag_id')
		.primaryKey()
		.references(() => tags.id),
	state: jsonb('state').notNull(),
	updatedAt: at('updated_at').notNull().defaultNow(),
});

/** A value that stands in for a tag's own until `until`, whatever dies meanwhile. */
export const testValues = pgTable(
	'test_values',
	{
		id: integer('id').primaryKey().generatedAlwaysAsIdentity(),
		siteId: integer('site_id')
			.notNull()
			.references(() => sites.id),
		tagId: integer('tag_id')
			.notNull()
			.references(() => tags.id),
		value: doublePrecision('value').notNull(),
		setAt: at('set_at').notNull().defaultNow(),
		setBy: text('set_by').notNull(),
		until: at('until').notNull(),
		endedAt: at('ended_at'),
	},
	(t) => [index('test_values_by_tag').on(t.tagId, t.until.desc())],
);
