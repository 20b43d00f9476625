// Schema. May touch: drizzle-orm and other schema files only.
import { sql } from 'drizzle-orm';
import { bigint, boolean, check, integer, jsonb, pgTable, text, timestamp, uniqueIndex, uuid } from 'drizzle-orm/pg-core';

const at = (name: string) => timestamp(name, { withTimezone: true, mode: 'date' });

/** One row: what this installation is. The epoch is part of every feed cursor; a restore begins a new one. */
export const installation = pgTable(
	'installation',
	{
		id: integer('id').primaryKey().default(1),
		uid: uuid('uid').notNull().defaultRandom(),
		epoch: uuid('epoch').notNull().defaultRandom(),
		isDemo: boolean('is_demo').notNull().default(false),
		createdAt: at('created_at').notNull().defaultNow(),
	},
	(t) => [check('installation_is_single', sql`${t.id} = 1`)],
);

export const sites = pgTable(
	'sites',
	{
		id: integer('id').primaryKey().generatedAlwaysAsIdentity(),
		slug: text('slug').notNull(),
		name: text('name').notNull(),
		timeZone: text('time_zone').notNull().default('UTC'),
		createdAt: at('created_at').notNull().defaultNow(),
	},
	(t) => [uniqueIndex('sites_by_slug').on(t.slug), check('sites_slug_form', sql`${t.slug} ~ '^[a-z0-9-]{1,60}$'`)],
);

export const areas = pgTable(
	'areas',
	{
		id: integer('id').primaryKey().generatedAlwaysAsIdentity(),
		siteId: integer('site_id')
			.notNull()
			.references(() => sites.id),
		name: text('name').notNull(),
	},
	(t) => [uniqueIndex('areas_one_name_per_site').on(t.siteId, sql`lower(${t.name})`)],
);

/** A machine is unique by name in its site; its area is an attribute. `data` holds what the picture and the zones need. */
export const machines = pgTable(
	'machines',
	{
		id: integer('id').primaryKey().generatedAlwaysAsIdentity(),
		siteId: integer('site_id')
			.notNull()
			.references(() => sites.id),
		areaId: integer('area_id').references(() => areas.id),
		name: text('name').notNull(),
		description: text('description'),
		/** kind, power_kw, speed_rpm, iso_group, foundation, orientation, vanes, pump_category … */
		data: jsonb('data').$type<Record<string, unknown>>().notNull().default({}),
		version: integer('version').notNull().default(1),
		deletedAt: at('deleted_at'),
	},
	(t) => [
		uniqueIndex('machines_one_name_per_site')
			.on(t.siteId, sql`lower(${t.name})`)
			.where(sql`deleted_at is null`),
	],
);

export const measuringPoints = pgTable(
	'measuring_points',
	{
		id: integer('id').primaryKey().generatedAlwaysAsIdentity(),
		machineId: integer('machine_id')
			.notNull()
			.references(() => machines.id),
		name: text('name').notNull(),
		description: text('description'),
		/** Bearing number, where on the train, directions of the axes. */
		data: jsonb('data').$type<Record<string, unknown>>().notNull().default({}),
	},
	(t) => [uniqueIndex('points_one_name_per_machine').on(t.machineId, sql`lower(${t.name})`)],
);

/** A sensor sits at a measuring point and can be replaced without touching tags or history. */
export const sensors = pgTable('sensors', {
	id: integer('id').primaryKey().generatedAlwaysAsIdentity(),
	siteId: integer('site_id')
		.notNull()
		.references(() => sites.id),
	pointId: integer('point_id').references(() => measuringPoints.id),
	serial: text('serial').notNull(),
	kind: text('kind').notNull(),
	mounting: text('mounting'),
	/** Orientation of the sensor's axes to the machine's. */
	orientation: jsonb('orientation').$type<Record<string, string>>().notNull().default({}),
	batteryInstalledOn: text('battery_installed_on'),
	installedAt: at('installed_at').notNull().defaultNow(),
	removedAt: at('removed_at'),
});

/** Small settings of the whole installation, by key. */
export const settings = pgTable('settings', {
	key: text('key').primaryKey(),
	value: jsonb('value').notNull(),
	updatedAt: at('updated_at').notNull().defaultNow(),
});

/** Numbered samples of dropped or refused input, with the reason; can be looked at and sent again. */
export const deadLetters = pgTable('dead_letters', {
	id: bigint('id', { mode: 'number' }).primaryKey().generatedAlwaysAsIdentity(),
	at: at('at').notNull().defaultNow(),
	siteId: integer('site_id'),
	tagId: integer('tag_id'),
	reason: text('reason').notNull(),
	row: jsonb('row').notNull(),
	resolvedAt: at('resolved_at'),
});
