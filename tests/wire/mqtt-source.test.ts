// Edge: wire tests. May touch: sockets, child processes, simulators.
import { spawn, type ChildProcess } from 'node:child_process';
import { once } from 'node:events';
import { readFileSync } from 'node:fs';
import { mkdtemp, rm, writeFile } from 'node:fs/promises';
import { createServer, connect as connectSocket } from 'node:net';
import { tmpdir } from 'node:os';
import { join } from 'node:path';
import { connect, connectAsync, type IClientPublishOptions } from 'mqtt';
import { afterAll, afterEach, beforeAll, describe, expect, it } from 'vitest';
import type { WantedAddress } from '#lib/domain/tag-map/address.ts';
import { mqttSettings } from '#lib/domain/source-settings.ts';
import { createMqttSource } from '#lib/pipeline/sources/mqtt/mqtt-source.ts';
import { SourceError, type Emit, type Sample, type SourceLink } from '#lib/pipeline/sources/source.ts';
import { startMqttSimulator, type MqttSimulator } from '#simulators/mqtt/mqtt-simulator.ts';
import { createPlant } from '#simulators/scenario/plant.ts';

interface Broker {
	url: string;
	versions: readonly (4 | 5)[];
	restart(): Promise<void>;
	stop(): Promise<void>;
}

async function freePort(): Promise<number> {
	const server = createServer().listen(0, '127.0.0.1');
	await once(server, 'listening');
	const address = server.address();
	server.close();
	await once(server, 'close');
	if (address === null || typeof address === 'string') throw new Error('no port');
	return address.port;
}

async function startAedes(): Promise<Broker> {
	const simulator: MqttSimulator = await startMqttSimulator({ port: 0, plant: createPlant(1), publishes: false });
	return {
		url: `mqtt://127.0.0.1:${simulator.port}`,
		versions: [4],
		restart: () => simulator.restart(),
		stop: () => simulator.stop(),
	};
}

async function startMosquitto(): Promise<Broker> {
	const port = await freePort();
	const folder = await mkdtemp(join(tmpdir(), 'millrace-mosquitto-'));
	const config = join(folder, 'broker.conf');
	await writeFile(config, `listener ${port} 127.0.0.1\nallow_anonymous true\npersistence false\nmax_queued_messages 10000\n`);
	let child: ChildProcess | null = null;
	const start = async () => {
		child = spawn('/usr/sbin/mosquitto', ['-c', config], { stdio: 'ignore' });
		await until(() => answers(port));
	};
	const end = async () => {
		if (!child) return;
		const ended = once(child, 'exit');
		child.kill('SIGTERM');
		await ended;
	};
	await start();
	return {
		url: `mqtt://127.0.0.1:${port}`,
		versions: [4, 5],
		async restart() {
			await end();
			await start();
		},
		async stop() {
			await end();
			await rm(folder, { recursive: true });
		},
	};
}

function answers(port: number): Promise<boolean> {
	return new Promise((resolve) => {
		const socket = connectSocket(port, '127.0.0.1');
		socket.once('connect', () => {
			socket.destroy();
			resolve(true);
		});
		socket.once('error', () => resolve(false));
	});
}

async function until(condition: () => boolean | Promise<boolean>): Promise<void> {
	const end = Date.now() + 8_000;
	while (!(await condition())) {
		if (Date.now() > end) throw new Error('waited 8 s in vain');
		await new Promise((resolve) => setTimeout(resolve, 10));
	}
}

const wanted = (key: number, topic: string, timePointer: string | null = null): WantedAddress => ({
	key,
	intervalMs: 1_000,
	address: { kind: 'mqtt', topic, valuePointer: null, timePointer, qualityPointer: null, timeFormat: 'auto' },
});
const text = (sample: Sample) => (sample.raw?.kind === 'payload' ? Buffer.from(sample.raw.bytes).toString() : '');
let count = 0;

describe.each([
	['aedes', startAedes],
	['mosquitto', startMosquitto],
] as const)('an MQTT source at %s', (_name, startBroker) => {
	let broker: Broker;
	const ending: (() => Promise<unknown>)[] = [];
	beforeAll(async () => {
		broker = await startBroker();
	});
	afterEach(async () => {
		for (const end of ending.splice(0).reverse()) await end();
	});
	afterAll(() => broker.stop());

	const source = (id: string, version: 4 | 5 = 4) => {
		const events: string[] = [];
		const made = createMqttSource(mqttSettings.parse({ url: broker.url, protocol_version: version }), {
			sourceId: id,
			pkiFolder: '',
			installationId: 'test',
			now: Date.now,
			observer: { event: (_level, code) => events.push(code), exchange() {}, request() {}, clockSkew() {} },
		});
		return { ...made, events };
	};
	const open = async (from: ReturnType<typeof source>, emit: Emit) => {
		const controller = new AbortController();
		const link: SourceLink = await from.open(emit, controller.signal);
		const close = async () => {
			controller.abort();
			await link.closed.catch(() => undefined);
		};
		ending.push(close);
		return { link, close };
	};
	const publisher = async (): Promise<(topic: string, payload: string, options?: IClientPublishOptions) => Promise<unknown>> => {
		const client = await connectAsync(broker.url, { reconnectPeriod: 0 });
		ending.push(() => client.endAsync(true));
		return (topic, payload, options) => client.publishAsync(topic, payload, { qos: 1, ...options });
	};
	const keep =
		(into: Sample[]): Emit =>
		(batch) => {
			into.push(...batch);
			return Promise.resolve('stored');
		};
	const fresh = () => `s${process.pid}-${++count}`;

	it('gets what was published while it was away', async () => {
		for (const version of broker.versions) {
			const [got, id] = [[] as Sample[], fresh()];
			const one = source(id, version);
			const first = await open(one, keep(got));
			await first.link.setAddresses([wanted(1, `${id}/x`)]);
			await first.close();
			const publish = await publisher();
			for (let n = 0; n < 100; n++) await publish(`${id}/x`, String(n));
			// Another process with the same id, which knows nothing of the old subscription.
			const second = await open(source(id, version), keep(got));
			await new Promise((resolve) => setTimeout(resolve, 50));
			expect(got).toEqual([]);
			await second.link.setAddresses([wanted(1, `${id}/x`)]);
			await until(() => got.length >= 100);
			expect(got.map(text)).toEqual(Array.from({ length: 100 }, (_, n) => String(n)));
		}
	});

	it('subscribes again after the broker has forgotten everything', async () => {
		const [got, id] = [[] as Sample[], fresh()];
		const one = source(id);
		const first = await open(one, keep(got));
		await first.link.setAddresses([wanted(1, `${id}/x`)]);
		const lost = expect(first.link.closed).rejects.toBeInstanceOf(SourceError);
		await broker.restart();
		await lost;
		const second = await open(one, keep(got));
		await second.link.setAddresses([wanted(1, `${id}/x`)]);
		await (
			await publisher()
		)(`${id}/x`, '5');
		await until(() => got.length === 1);
	});

	it('is sent again what it took and never stored', async () => {
		const id = fresh();
		const taken: string[] = [];
		const one = source(id);
		const first = await open(one, (batch) => {
			taken.push(...batch.map(text));
			return Promise.reject(new Error('the disk is full'));
		});
		await first.link.setAddresses([wanted(1, `${id}/x`)]);
		const lost = expect(first.link.closed).rejects.toBeInstanceOf(SourceError);
		await (
			await publisher()
		)(`${id}/x`, '7');
		await lost;
		expect(taken).toEqual(['7']);
		const got: Sample[] = [];
		const second = await open(one, keep(got));
		await second.link.setAddresses([wanted(1, `${id}/x`)]);
		await until(() => got.length === 1);
		expect(text(got[0]!)).toBe('7');
	});

	it('goes on reading while a batch is being stored', async () => {
		const id = fresh();
		const batches: number[] = [];
		let store: () => void = () => undefined;
		const stored = new Promise<void>((resolve) => {
			store = resolve;
		});
		const { link } = await open(source(id), async (batch) => {
			batches.push(batch.length);
			await stored;
			return 'stored';
		});
		await link.setAddresses([wanted(1, `${id}/x`)]);
		const publish = await publisher();
		for (let n = 0; n < 10; n++) await publish(`${id}/x`, String(n));
		await until(() => batches.length === 1);
		store();
		await until(() => batches.reduce((sum, size) => sum + size, 0) === 10);
		expect(batches.length).toBeLessThan(10);
	});

	it('gives one sample a tag when filters overlap', async () => {
		const [got, id] = [[] as Sample[], fresh()];
		const { link } = await open(source(id), keep(got));
		await link.setAddresses([wanted(1, `${id}/+`), wanted(2, `${id}/b`), wanted(3, `${id}/#`)]);
		await (
			await publisher()
		)(`${id}/b`, '1');
		await until(() => got.length >= 3);
		await new Promise((resolve) => setTimeout(resolve, 50));
		expect(got.map((sample) => sample.key).sort()).toEqual([1, 2, 3]);
	});

	it('marks an old retained value, and takes an empty one for cleared', async () => {
		const [got, id] = [[] as Sample[], fresh()];
		const publish = await publisher();
		await publish(`${id}/plain`, '3', { retain: true });
		await publish(`${id}/timed`, '{"t":1}', { retain: true });
		const { link } = await open(source(id), keep(got));
		await link.setAddresses([wanted(1, `${id}/plain`), wanted(2, `${id}/timed`, '/t')]);
		await until(() => got.length === 2);
		expect(got.find((sample) => sample.key === 1)?.retained).toBe(true);
		expect(got.find((sample) => sample.key === 2)?.retained).toBeUndefined();
		await publish(`${id}/plain`, '', { retain: true });
		await publish(`${id}/plain`, '4');
		await until(() => got.some((sample) => text(sample) === '4'));
		expect(got).toHaveLength(3);
	});

	it('gets rid of a topic that the map lost while it was down', async () => {
		const [got, id] = [[] as Sample[], fresh()];
		const first = await open(source(id), keep(got));
		await first.link.setAddresses([wanted(1, `${id}/old`), wanted(2, `${id}/new`)]);
		await first.close();
		const later = source(id);
		const second = await open(later, keep(got));
		await second.link.setAddresses([wanted(2, `${id}/new`)]);
		const publish = await publisher();
		await publish(`${id}/old`, '1');
		await until(() => later.events.includes('unknown-topic'));
		await publish(`${id}/new`, '2');
		await until(() => got.length === 1);
		expect(got[0]?.key).toBe(2);
	});

	it('suspects another client with the same id after repeated drops', async () => {
		const id = fresh();
		const one = source(id);
		let code = '';
		for (let turn = 0; turn < 5; turn++) {
			const { link } = await open(one, keep([]));
			const thief = connect(broker.url, { clientId: `millrace-${id}`, reconnectPeriod: 0 });
			const error: unknown = await link.closed.catch((reason: unknown) => reason);
			await thief.endAsync(true);
			if (error instanceof SourceError) code = error.advice.code;
		}
		expect(code).toBe('duplicate-client-id');
	});

	it('tests step by step, and says what is wrong of a closed port', async () => {
		const publish = await publisher();
		await publish(`${fresh()}/x`, '1', { retain: true });
		const report = await source('t').test(AbortSignal.timeout(8_000));
		expect(report).toMatchObject({ ok: true, advice: null });
		expect(report.steps.map((step) => step.name)).toEqual(['Name', 'Port', 'Connect', 'Subscribe', 'First message']);
		const closed = createMqttSource(mqttSettings.parse({ url: `mqtt://127.0.0.1:${await freePort()}` }), {
			sourceId: 't',
			pkiFolder: '',
			installationId: 'test',
			now: Date.now,
			observer: { event() {}, exchange() {}, request() {}, clockSkew() {} },
		});
		expect((await closed.test(AbortSignal.timeout(5_000))).advice?.code).toBe('port-closed');
		await expect(closed.open(keep([]), AbortSignal.timeout(5_000))).rejects.toMatchObject({ advice: { code: 'port-closed' } });
	});
});

it('holds acknowledgements only in the client version it was proven with', () => {
	const found: unknown = JSON.parse(readFileSync(join(import.meta.dirname, '../../node_modules/mqtt/package.json'), 'utf8'));
	expect(found).toMatchObject({ version: '5.16.0' });
});
