// Schema. May touch: drizzle-orm and other schema files only.
import { sql } from 'drizzle-orm';
import {
	boolean,
	doublePrecision,
	index,
	integer,
	jsonb,
	pgTable,
	primaryKey,
	text,
	timestamp,
	uniqueIndex,
	uuid,
} from 'drizzle-orm/pg-core';
import type { MapRow } from '../../../domain/tag-map/row.ts';
import { machines, measuringPoints, sites } from './site.ts';
import { sources } from './source.ts';

const at = (name: string) => timestamp(name, { withTimezone: true, mode: 'date' });

/**
 * A tag has an id for life; the name may change. A row exists from the moment a draft first names the tag:
 * `publishedAt` null means only a draft knows it, `retiredAt` set means unmapped (history stays).
 */
export const tags = pgTable(
	'tags',
	{
		id: integer('id').primaryKey().generatedAlwaysAsIdentity(),
		siteId: integer('site_id')
			.notNull()
			.references(() => sites.id),
		name: text('name').notNull(),
		unit: text('unit').notNull().default('1'),
		detector: text('detector').notNull().default('none'),
		quantity: text('quantity'),
		sourceId: uuid('source_id').references(() => sources.id),
		machineId: integer('machine_id').references(() => machines.id),
		pointId: integer('point_id').references(() => measuringPoints.id),
		/** The published row, with `id`; null before the first publish. */
		row: jsonb('row').$type<MapRow>(),
		/** Revision since which unit and detector stand; readings of earlier revisions are in another unit and no answer spans both. */
		unitRevision: integer('unit_revision').notNull().default(0),
		/** Revision that last changed this tag. */
		revision: integer('revision').notNull().default(0),
		publishedAt: at('published_at'),
		retiredAt: at('retired_at'),
	},
	(t) => [
		uniqueIndex('tags_one_live_name_per_site')
			.on(t.siteId, sql`lower(${t.name})`)
			.where(sql`published_at is not null and retired_at is null`),
		index('tags_by_site').on(t.siteId, t.id),
		index('tags_by_source').on(t.sourceId),
	],
);

/** One draft a site: only what differs from the published map is kept. */
export const mapDrafts = pgTable('map_drafts', {
	siteId: integer('site_id')
		.primaryKey()
		.references(() => sites.id),
	/** Rises with every change; the ETag. */
	version: integer('version').notNull().default(1),
	baseRevision: integer('base_revision').notNull().default(0),
	/** Converts limits, deadband and ranges of tags whose unit changes, in the publish. */
	convert: boolean('convert').notNull().default(false),
	updatedAt: at('updated_at').notNull().defaultNow(),
	updatedBy: text('updated_by'),
});

/** A row of the draft that differs from the published one; `row` null means the draft removes the tag. */
export const draftRows = pgTable(
	'draft_rows',
	{
		siteId: integer('site_id')
			.notNull()
			.references(() => sites.id),
		tagId: integer('tag_id')
			.notNull()
			.references(() => tags.id),
		row: jsonb('row').$type<MapRow>(),
		/** Order in which new rows were added. */
		position: integer('position').notNull().default(0),
		rowVersion: integer('row_version').notNull().default(1),
		updatedAt: at('updated_at').notNull().defaultNow(),
		updatedBy: text('updated_by'),
	},
	(t) => [primaryKey({ columns: [t.siteId, t.tagId] })],
);

export const mapRevisions = pgTable(
	'map_revisions',
	{
		siteId: integer('site_id')
			.notNull()
			.references(() => sites.id),
		revision: integer('revision').notNull(),
		publishedAt: at('published_at').notNull().defaultNow(),
		publishedBy: text('published_by').notNull(),
		note: text('note').notNull().default(''),
		started: integer('started').notNull(),
		stopped: integer('stopped').notNull(),
		changed: integer('changed').notNull(),
		restoredFrom: integer('restored_from'),
	},
	(t) => [primaryKey({ columns: [t.siteId, t.revision] })],
);

/** Rows of every revision: a row stands from `fromRevision` up to, not including, `toRevision`. */
export const mapRows = pgTable(
	'map_rows',
	{
		siteId: integer('site_id')
			.notNull()
			.references(() => sites.id),
		tagId: integer('tag_id')
			.notNull()
			.references(() => tags.id),
		fromRevision: integer('from_revision').notNull(),
		toRevision: integer('to_revision'),
		row: jsonb('row').$type<MapRow>().notNull(),
	},
	(t) => [
		primaryKey({ columns: [t.siteId, t.tagId, t.fromRevision] }),
		index('map_rows_current')
			.on(t.siteId)
			.where(sql`to_revision is null`),
	],
);

export const limitRevisions = pgTable(
	'limit_revisions',
	{
		siteId: integer('site_id')
			.notNull()
			.references(() => sites.id),
		revision: integer('revision').notNull(),
		savedAt: at('saved_at').notNull().defaultNow(),
		savedBy: text('saved_by').notNull(),
		note: text('note').notNull().default(''),
	},
	(t) => [primaryKey({ columns: [t.siteId, t.revision] })],
);

/** Limits of every revision, as map rows are kept; an alarm keeps the limit row that it met. */
export const limits = pgTable(
	'limits',
	{
		id: integer('id').primaryKey().generatedAlwaysAsIdentity(),
		siteId: integer('site_id')
			.notNull()
			.references(() => sites.id),
		tagId: integer('tag_id')
			.notNull()
			.references(() => tags.id),
		kind: text('kind').notNull(),
		level: text('level', { enum: ['alert', 'danger'] }).notNull(),
		value: doublePrecision('value'),
		deadband: doublePrecision('deadband').notNull().default(0),
		raiseAfterS: doublePrecision('raise_after_s').notNull().default(0),
		clearAfterS: doublePrecision('clear_after_s').notNull().default(0),
		windowS: doublePrecision('window_s'),
		baseline: jsonb('baseline').$type<{ mean: number; sigma: number; from?: string | null; to?: string | null }>(),
		state: doublePrecision('state'),
		origin: text('origin', { enum: ['standard', 'baseline', 'maker', 'site'] })
			.notNull()
			.default('site'),
		note: text('note'),
		cause: text('cause'),
		consequence: text('consequence'),
		response: text('response'),
		respondWithinS: doublePrecision('respond_within_s'),
		fromRevision: integer('from_revision').notNull(),
		toRevision: integer('to_revision'),
	},
	(t) => [
		index('limits_current')
			.on(t.tagId)
			.where(sql`to_revision is null`),
		index('limits_by_site').on(t.siteId),
	],
);
