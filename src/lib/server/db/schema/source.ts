// Schema. May touch: drizzle-orm and other schema files only.
import { sql } from 'drizzle-orm';
import {
	bigint,
	boolean,
	customType,
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

const at = (name: string) => timestamp(name, { withTimezone: true, mode: 'date' });
const bytea = customType<{ data: Buffer }>({ dataType: () => 'bytea' });

export const sources = pgTable(
	'sources',
	{
		id: uuid('id').primaryKey().defaultRandom(),
		siteId: integer('site_id')
			.notNull()
			.references(() => sites.id),
		name: text('name').notNull(),
		kind: text('kind', { enum: ['opcua', 'modbus', 'mqtt'] }).notNull(),
		enabled: boolean('enabled').notNull().default(true),
		settings: jsonb('settings').$type<Record<string, unknown>>().notNull(),
		/** Passwords and keys; never selected for an answer. */
		secrets: jsonb('secrets').$type<Record<string, string>>().notNull().default({}),
		contact: text('contact'),
		notes: text('notes'),
		version: integer('version').notNull().default(1),
		createdAt: at('created_at').notNull().defaultNow(),
		updatedAt: at('updated_at').notNull().defaultNow(),
		deletedAt: at('deleted_at'),
	},
	(t) => [
		uniqueIndex('sources_one_name_per_site')
			.on(t.siteId, sql`lower(${t.name})`)
			.where(sql`deleted_at is null`),
	],
);

/** A running collector process; `heartbeatAt` is written every 2 s. */
export const collectors = pgTable('collectors', {
	id: uuid('id').primaryKey(),
	/** Stable id of the data folder's own collector: after a kill it takes its own leases over at once. */
	instance: text('instance').notNull(),
	host: text('host').notNull(),
	pid: integer('pid').notNull(),
	startedAt: at('started_at').notNull().defaultNow(),
	heartbeatAt: at('heartbeat_at').notNull().defaultNow(),
	/** readings_per_s, queue, dropped, spool … for the pulse line and /metrics. */
	stats: jsonb('stats').$type<Record<string, number>>().notNull().default({}),
});

/** One owner a source at a time; only PostgreSQL's clock judges `until`. Term 12 s, renewed every 3 s. */
export const sourceLeases = pgTable('source_leases', {
	sourceId: uuid('source_id')
		.primaryKey()
		.references(() => sources.id),
	owner: uuid('owner'),
	instance: text('instance'),
	/** Rises with every change of owner. */
	token: bigint('token', { mode: 'number' }).notNull().default(0),
	until: at('until').notNull(),
});

/** What the owner last said of the source; one row a source. */
export const sourceHealth = pgTable('source_health', {
	sourceId: uuid('source_id')
		.primaryKey()
		.references(() => sources.id),
	/** `ok`: good data in time; `late`: some tags stale; `lost`: no link or no good data; `waiting`: just started; `off`: disabled. */
	state: text('state', { enum: ['ok', 'late', 'lost', 'waiting', 'off'] }).notNull(),
	since: at('since').notNull().defaultNow(),
	advice: jsonb('advice').$type<{ code: string; text: string; check: string } | null>(),
	lastGoodAt: at('last_good_at'),
	subscribedAt: at('subscribed_at'),
	good: bigint('good', { mode: 'number' }).notNull().default(0),
	bad: bigint('bad', { mode: 'number' }).notNull().default(0),
	duplicates: bigint('duplicates', { mode: 'number' }).notNull().default(0),
	dropped: bigint('dropped', { mode: 'number' }).notNull().default(0),
	requests: bigint('requests', { mode: 'number' }).notNull().default(0),
	failures: bigint('failures', { mode: 'number' }).notNull().default(0),
	reconnects: bigint('reconnects', { mode: 'number' }).notNull().default(0),
	tags: integer('tags').notNull().default(0),
	staleTags: integer('stale_tags').notNull().default(0),
	latencyP50Ms: doublePrecision('latency_p50_ms'),
	latencyP95Ms: doublePrecision('latency_p95_ms'),
	clockSkewMs: doublePrecision('clock_skew_ms'),
	updatedAt: at('updated_at').notNull().defaultNow(),
});

/** Changes of state and remarkable things, kept 30 days. */
export const sourceEvents = pgTable(
	'source_events',
	{
		id: bigint('id', { mode: 'number' }).primaryKey().generatedAlwaysAsIdentity(),
		sourceId: uuid('source_id')
			.notNull()
			.references(() => sources.id),
		at: at('at').notNull().defaultNow(),
		level: text('level', { enum: ['note', 'warning', 'error'] }).notNull(),
		code: text('code').notNull(),
		text: text('text').notNull(),
	},
	(t) => [index('source_events_by_source').on(t.sourceId, t.id.desc())],
);

/** Exchanges around failures (bytes and meaning), one partition a UTC day (made by hand in the migrations), 30 days of them unless set otherwise. */
export const sourceExchanges = pgTable(
	'source_exchanges',
	{
		id: bigint('id', { mode: 'number' }).primaryKey().generatedAlwaysAsIdentity(),
		sourceId: uuid('source_id')
			.notNull()
			.references(() => sources.id),
		at: at('at').notNull(),
		direction: text('direction', { enum: ['out', 'in', 'none'] }).notNull(),
		bytes: text('bytes').notNull(),
		meaning: text('meaning').notNull(),
		failed: boolean('failed').notNull(),
	},
	(t) => [index('source_exchanges_by_source').on(t.sourceId, t.id.desc())],
);

/** Counts by minute, for statistics over time. */
export const sourceMinutes = pgTable(
	'source_minutes',
	{
		sourceId: uuid('source_id').notNull(),
		minute: at('minute').notNull(),
		good: integer('good').notNull(),
		bad: integer('bad').notNull(),
		requests: integer('requests').notNull(),
		failures: integer('failures').notNull(),
		reconnects: integer('reconnects').notNull(),
		latencyP50Ms: doublePrecision('latency_p50_ms'),
		latencyP95Ms: doublePrecision('latency_p95_ms'),
	},
	(t) => [uniqueIndex('source_minutes_key').on(t.sourceId, t.minute)],
);

/** A test, browse or dry run that the owner of a running source carries out over its own connection. */
export const sourceRequests = pgTable(
	'source_requests',
	{
		id: uuid('id').primaryKey().defaultRandom(),
		sourceId: uuid('source_id')
			.notNull()
			.references(() => sources.id),
		kind: text('kind', { enum: ['test', 'browse', 'read', 'reconnect'] }).notNull(),
		params: jsonb('params').$type<Record<string, unknown>>().notNull().default({}),
		requestedAt: at('requested_at').notNull().defaultNow(),
		answeredAt: at('answered_at'),
		answer: jsonb('answer').$type<Record<string, unknown>>(),
	},
	(t) => [
		index('source_requests_open')
			.on(t.sourceId)
			.where(sql`answered_at is null`),
	],
);

/** Server certificates seen, and what an administrator or integrator decided of them. */
export const certificates = pgTable('certificates', {
	fingerprint: text('fingerprint').primaryKey(),
	sourceId: uuid('source_id').references(() => sources.id),
	subject: text('subject').notNull(),
	issuer: text('issuer').notNull(),
	validFrom: at('valid_from'),
	validTo: at('valid_to'),
	der: bytea('der').notNull(),
	state: text('state', { enum: ['unknown', 'trusted', 'rejected'] })
		.notNull()
		.default('unknown'),
	firstSeenAt: at('first_seen_at').notNull().defaultNow(),
	decidedAt: at('decided_at'),
	decidedBy: text('decided_by'),
});
