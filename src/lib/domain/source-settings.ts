// Pure.
import { z } from 'zod';

export const SOURCE_KINDS = ['opcua', 'modbus', 'mqtt'] as const;
export type SourceKind = (typeof SOURCE_KINDS)[number];

/** `source`: the device's time; `hub`: ours; a number: the device's time plus that many seconds. */
export const timePolicy = z.union([z.literal('source'), z.literal('hub'), z.number().min(-86_400).max(86_400)]);
const port = z.number().int().min(1).max(65_535);
const secret = z.string().max(1_000).nullish();

export const opcuaSettings = z.strictObject({
	endpoint_url: z.string().regex(/^opc\.tcp:\/\/[^\s/]+/, 'an address like opc.tcp://host:4840'),
	security_mode: z.enum(['None', 'Sign', 'SignAndEncrypt']).default('None'),
	security_policy: z.enum(['None', 'Basic256Sha256', 'Aes128_Sha256_RsaOaep', 'Aes256_Sha256_RsaPss']).default('None'),
	user_name: z.string().max(200).nullish(),
	password: secret,
	publishing_interval_ms: z.number().int().min(50).max(3_600_000).default(1_000),
	time_policy: timePolicy.default('source'),
});

export const modbusSettings = z.strictObject({
	transport: z.enum(['tcp', 'rtu-over-tcp', 'rtu']).default('tcp'),
	host: z.string().min(1).max(253).nullish(),
	port: port.nullish(),
	path: z.string().max(400).nullish(),
	baud_rate: z.number().int().min(300).max(1_000_000).nullish(),
	timeout_ms: z.number().int().min(50).max(60_000).default(2_000),
	gap_ms: z.number().int().min(0).max(10_000).default(0),
	max_registers: z.number().int().min(1).max(125).default(125),
	time_policy: timePolicy.nullish(),
});

export const mqttSettings = z.strictObject({
	url: z.string().regex(/^(mqtts?|wss?):\/\/[^\s/]+/, 'an address like mqtt://host:1883'),
	protocol_version: z.union([z.literal(4), z.literal(5)]).default(4),
	client_id: z.string().min(1).max(200).nullish(),
	user_name: z.string().max(200).nullish(),
	password: secret,
	ca: z.string().max(20_000).nullish(),
	qos: z.union([z.literal(0), z.literal(1)]).default(1),
	payload: z.enum(['json', 'sparkplug']).default('json'),
	time_policy: timePolicy.default('source'),
});

export type OpcuaSettings = z.infer<typeof opcuaSettings>;
export type ModbusSettings = z.infer<typeof modbusSettings>;
export type MqttSettings = z.infer<typeof mqttSettings>;

const common = {
	name: z.string().trim().min(1).max(120),
	enabled: z.boolean().default(true),
	contact: z.string().max(500).nullish(),
	notes: z.string().max(4_000).nullish(),
};

/** A source as the API takes it. Secrets (`password`) are write-only: answers leave them out. */
export const sourceInput = z.discriminatedUnion('kind', [
	z.strictObject({ ...common, kind: z.literal('opcua'), settings: opcuaSettings }),
	z.strictObject({ ...common, kind: z.literal('modbus'), settings: modbusSettings }),
	z.strictObject({ ...common, kind: z.literal('mqtt'), settings: mqttSettings }),
]);
export type SourceInput = z.infer<typeof sourceInput>;

/** A source with everything needed to run it, secrets included; never leaves the server. */
export type SourceConfig = { id: string; siteId: number; version: number } & SourceInput;

/** Settings that are written and never shown. */
export const SECRET_SETTINGS = ['password'] as const;
