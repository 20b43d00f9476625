// Schema. May touch: drizzle-orm and other schema files only.
import { bigint, boolean, doublePrecision, integer, pgTable, text, timestamp } from 'drizzle-orm/pg-core';
import { sites } from './site.ts';
import { tags } from './tag-map.ts';

const at = (name: string) => timestamp(name, { withTimezone: true, mode: 'date' });

/** The newest reading of each tag by `at`, stored or not; written at most once a second a tag, moves only forward. */
export const latest = pgTable('latest', {
	tagId: integer('tag_id')
		.primaryKey()
		.references(() => tags.id),
	at: at('at').notNull(),
	/** In the tag's unit; kept when the tag goes stale. */
	value: doublePrecision('value'),
	/** OPC UA StatusCode as signed int4. */
	quality: integer('quality').notNull(),
	receivedAt: at('received_at').notNull(),
	/** The last reading or confirmation: what freshness counts from. */
	confirmedAt: at('confirmed_at').notNull(),
	isHubTime: boolean('is_hub_time').notNull(),
	sourceAt: at('source_at'),
	reason: text('reason'),
	/** Raw scalar as text (exact for 64 bits), and bytes or payload as captured. */
	raw: text('raw'),
	wire: text('wire'),
	verdict: text('verdict', { enum: ['normal', 'alert', 'danger', 'unknown'] })
		.notNull()
		.default('normal'),
	isStale: boolean('is_stale').notNull().default(false),
	revision: integer('revision').notNull(),
	updatedAt: at('updated_at').notNull().defaultNow(),
});

/** Last position given out, by site. Its row lock, taken as the last act before commit, makes one order for every reader. */
export const feedHeads = pgTable('feed_heads', {
	siteId: integer('site_id')
		.primaryKey()
		.references(() => sites.id),
	position: bigint('position', { mode: 'number' }).notNull().default(0),
	/** Readings at or below this position are gone from the journal. */
	oldest: bigint('oldest', { mode: 'number' }).notNull().default(0),
});

/** How far each known reader is, for 'who reads it and how far behind'. */
export const feedReaders = pgTable('feed_readers', {
	/** Key id, or the person's session. */
	reader: text('reader').notNull().primaryKey(),
	siteId: integer('site_id')
		.notNull()
		.references(() => sites.id),
	name: text('name').notNull(),
	position: bigint('position', { mode: 'number' }).notNull(),
	readAt: at('read_at').notNull(),
});
