// Pure.
import { z } from 'zod';
import { modbusSettings, mqttSettings, opcuaSettings, SOURCE_KINDS } from '#lib/domain/source-settings.ts';

/** A source as the API answers it; secrets are never among its settings, `secrets_set` names those that are kept. */
export const sourceJson = z.object({
	id: z.string(),
	name: z.string(),
	kind: z.enum(SOURCE_KINDS),
	enabled: z.boolean(),
	settings: z.record(z.string(), z.unknown()),
	secrets_set: z.array(z.string()),
	contact: z.string().nullable(),
	notes: z.string().nullable(),
	version: z.number().int(),
});

/** As the API writes what the server keeps. */
export function toSourceJson({
	secretsSet,
	...source
}: Omit<z.input<typeof sourceJson>, 'secrets_set'> & { secretsSet: string[] }): z.input<typeof sourceJson> {
	return { ...source, secrets_set: secretsSet };
}

/** What a change may name; settings given are laid over those that stand. */
export const sourceChange = z.strictObject({
	name: z.string().trim().min(1).max(120).nullish(),
	kind: z.enum(SOURCE_KINDS).nullish(),
	enabled: z.boolean().nullish(),
	settings: z.record(z.string(), z.unknown()).nullish(),
	contact: z.string().max(500).nullish(),
	notes: z.string().max(4_000).nullish(),
	version: z.number().int().nullish(),
});

const beside = {
	/** A saved source whose secrets stand in where none are sent. */
	id: z.string().nullish(),
	name: z.string().nullish(),
	enabled: z.boolean().nullish(),
	contact: z.string().nullish(),
	notes: z.string().nullish(),
};

/** Settings to try before they are saved; what else a source has may come along. */
export const sourceToTest = z.discriminatedUnion('kind', [
	z.strictObject({ ...beside, kind: z.literal('opcua'), settings: opcuaSettings }),
	z.strictObject({ ...beside, kind: z.literal('modbus'), settings: modbusSettings }),
	z.strictObject({ ...beside, kind: z.literal('mqtt'), settings: mqttSettings }),
]);

const advice = z.object({ code: z.string(), text: z.string(), check: z.string() }).nullable();

export const testReport = z.object({
	ok: z.boolean(),
	steps: z.array(z.object({ name: z.string(), ok: z.boolean(), detail: z.string(), ms: z.number().optional() })),
	advice,
	certificate: z
		.object({ fingerprint: z.string(), subject: z.string(), issuer: z.string(), validFrom: z.string(), validTo: z.string() })
		.optional(),
});

const count = z.number().int();
const time = z.iso.datetime();
const ms = z.number().nullable();

export const healthJson = z.object({
	state: z.enum(['ok', 'late', 'lost', 'waiting', 'off']),
	since: time.nullable(),
	advice,
	last_good_at: time.nullable(),
	subscribed_at: time.nullable(),
	good: count,
	bad: count,
	duplicates: count,
	dropped: count,
	requests: count,
	failures: count,
	reconnects: count,
	tags: count,
	stale_tags: count,
	latency_p50_ms: ms,
	latency_p95_ms: ms,
	clock_skew_ms: ms,
	minutes: z.array(
		z.object({
			minute: time,
			good: count,
			bad: count,
			requests: count,
			failures: count,
			reconnects: count,
			latency_p50_ms: ms,
			latency_p95_ms: ms,
		}),
	),
	events: z.array(z.object({ at: time, level: z.enum(['note', 'warning', 'error']), code: z.string(), text: z.string() })),
	exchanges: z.array(
		z.object({ at: time, direction: z.enum(['out', 'in', 'none']), bytes: z.string(), meaning: z.string(), failed: z.boolean() }),
	),
});

export const browseItem = z.object({
	node: z.string(),
	name: z.string(),
	hasChildren: z.boolean(),
	isValue: z.boolean(),
	dataType: z.string().nullish(),
	unit: z.string().nullish(),
	low: z.number().nullish(),
	high: z.number().nullish(),
	value: z.string().nullish(),
});
