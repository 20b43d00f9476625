import { mkdtempSync, mkdirSync, rmSync, writeFileSync } from 'node:fs';
import { createConnection, createServer, type Socket } from 'node:net';
import { tmpdir } from 'node:os';
import { join } from 'node:path';
import { afterAll, afterEach, beforeAll, describe, expect, it } from 'vitest';
import { DataType, DataValue, StatusCode, StatusCodes } from 'node-opcua';
import { opcuaSettings, type OpcuaSettings } from '#lib/domain/source-settings.ts';
import { createOpcuaSource } from '#lib/pipeline/sources/opcua/opcua-source.ts';
import { toSample } from '#lib/pipeline/sources/opcua/variant-input.ts';
import type { Sample, SourceContext, SourceLink, WantedAddress } from '#lib/pipeline/sources/source.ts';
import { startOpcuaSimulator, type OpcuaSimulator } from '../../simulators/opcua/opcua-simulator.ts';
import { freePort } from '../support/cluster.ts';

const NAMESPACE = 'urn:test:plant';
const NAMES = Array.from({ length: 10 }, (_, i) => `V${i}`);
let folder: string;
let server: OpcuaSimulator;
const running: (() => Promise<unknown>)[] = [];

beforeAll(async () => {
	folder = mkdtempSync(join(tmpdir(), 'millrace-wire-'));
	server = await startOpcuaSimulator({
		port: await freePort(),
		namespace: NAMESPACE,
		variables: [
			...NAMES.map((name, i) => ({ name, unit: 'mm/s', low: 0, high: 50, value: i + 0.5 })),
			{ name: 'BIG', dataType: 'Int64' as const, value: 9_007_199_254_740_993n },
			{ name: 'MINUS', dataType: 'Int64' as const, value: -4n },
		],
	});
}, 60_000);
afterAll(async () => {
	await server.stop();
	rmSync(folder, { recursive: true, force: true });
});
afterEach(async () => {
	for (const stop of running.splice(0).reverse()) await stop();
});

const wanted = (names: string[], intervalMs = 100): WantedAddress[] =>
	names.map((name, key) => ({
		key: key + 1,
		address: { kind: 'opcua', nodeId: `nsu=${NAMESPACE};s=${name}`, indexRange: null },
		intervalMs,
	}));

function context(events: string[] = []): SourceContext {
	return {
		observer: {
			event: (_, code) => events.push(code),
			exchange: () => undefined,
			request: () => undefined,
			clockSkew: () => undefined,
		},
		pkiFolder: join(folder, 'pki'),
		installationId: 'test-installation',
		now: Date.now,
	};
}
const settingsOf = (extra: Partial<OpcuaSettings> = {}) =>
	opcuaSettings.parse({ endpoint_url: server.endpointUrl, publishing_interval_ms: 100, ...extra });

async function open(addresses: WantedAddress[], extra: Partial<OpcuaSettings> = {}) {
	const samples: Sample[] = [];
	const events: string[] = [];
	const stop = new AbortController();
	const link: SourceLink = await createOpcuaSource(settingsOf(extra), context(events)).open(async (batch) => {
		samples.push(...batch);
		return 'stored';
	}, stop.signal);
	running.push(async () => {
		stop.abort();
		await link.closed.catch(() => undefined);
	});
	const results = await link.setAddresses(addresses);
	return { samples, events, link, results, values: () => samples.filter((sample) => sample.raw !== null) };
}
async function until(what: () => boolean, ms = 8_000): Promise<void> {
	const deadline = performance.now() + ms;
	while (!what()) {
		if (performance.now() > deadline) throw new Error('it did not happen in time');
		await new Promise((resolve) => setTimeout(resolve, 20));
	}
}
const valueOf = (sample: Sample | undefined) => (sample?.raw?.kind === 'variant' ? sample.raw.value : undefined);

describe('reading by subscription', () => {
	it('brings every value with its status and the source’s own time', async () => {
		const { samples, values } = await open(wanted(['V0']));
		await until(() => values().length >= 1);
		const at = Date.now() - 5_000;
		server.set('V0', 4.25, { at });
		await until(() => valueOf(samples.at(-1)) === 4.25);
		expect(samples.at(-1)).toMatchObject({ key: 1, sourceAt: at, sourceQuality: 0, fault: null, raw: { dataType: 'Double' } });
		server.set('V0', 4.5, { isBad: true });
		await until(() => samples.at(-1)?.sourceQuality === 0x808c0000);
	});

	it('keeps every digit and the sign of 64-bit values', async () => {
		const { values } = await open(wanted(['BIG', 'MINUS']));
		await until(() => values().length >= 2);
		expect(values().map(valueOf)).toEqual([9_007_199_254_740_993n, -4n]);
	});

	it('confirms a constant value while the server lives, so that it does not look dead', async () => {
		const { samples } = await open(wanted(['V1']));
		await until(() => samples.some((sample) => sample.confirms === true), 9_000);
		expect(samples.filter((sample) => sample.raw !== null)).toHaveLength(1);
	}, 15_000);

	it('takes what is sampled and makes up nothing in between', async () => {
		const { samples, events } = await open(
			[{ key: 1, address: { kind: 'opcua', nodeId: `nsu=${NAMESPACE};s=V2`, indexRange: null }, intervalMs: 1_000 }],
			{ publishing_interval_ms: 1_000 },
		);
		await until(() => samples.length >= 1);
		for (let i = 0; i < 60; i += 1) {
			server.set('V2', 100 + i);
			await new Promise((resolve) => setTimeout(resolve, 20));
		}
		server.set('V2', 999);
		await until(() => valueOf(samples.at(-1)) === 999);
		// Sampled once a second, the values in between were never taken: none of them is made up.
		expect(samples.length).toBeLessThan(10);
		expect(events).not.toContain('values-dropped');
	}, 15_000);

	it('takes only the difference of new addresses', async () => {
		const { samples, link } = await open(wanted(['V3']));
		await until(() => samples.length >= 1);
		await link.setAddresses([
			...wanted(['V3']),
			{ key: 9, address: { kind: 'opcua', nodeId: `nsu=${NAMESPACE};s=V4`, indexRange: null }, intervalMs: 100 },
		]);
		await until(() => samples.some((sample) => sample.key === 9));
		// The one that stayed was not made anew: a new item would say its value once more.
		expect(samples.filter((sample) => sample.key === 1 && sample.raw !== null)).toHaveLength(1);
		await link.setAddresses([
			{ key: 9, address: { kind: 'opcua', nodeId: `nsu=${NAMESPACE};s=V4`, indexRange: null }, intervalMs: 100 },
		]);
		const before = samples.length;
		server.set('V3', 77);
		server.set('V4', 78);
		await until(() => samples.slice(before).some((sample) => valueOf(sample) === 78));
		expect(samples.slice(before).some((sample) => valueOf(sample) === 77)).toBe(false);
	});
});

describe('a network that gathers what it carries', () => {
	it('loses no first value that comes in one piece with the answer that its item was created', async () => {
		// What the server sends is passed on in one piece every 400 ms, four publishings long.
		const sockets = new Set<Socket>();
		const proxy = createServer((client) => {
			const upstream = createConnection(server.port, '127.0.0.1');
			let gathered: Buffer[] = [];
			const pass = setInterval(() => {
				if (gathered.length > 0) client.write(Buffer.concat(gathered));
				gathered = [];
			}, 400);
			client.on('data', (chunk) => upstream.write(chunk));
			upstream.on('data', (chunk) => gathered.push(chunk));
			for (const socket of [client, upstream]) {
				sockets.add(socket);
				socket.on('error', () => undefined);
				socket.on('close', () => {
					clearInterval(pass);
					client.destroy();
					upstream.destroy();
				});
			}
		});
		const port = await freePort();
		await new Promise<void>((resolve) => proxy.listen(port, '127.0.0.1', resolve));
		running.push(async () => {
			for (const socket of sockets) socket.destroy();
			await new Promise((resolve) => proxy.close(resolve));
		});
		const { values } = await open(wanted(['V0', 'V1']), { endpoint_url: `opc.tcp://127.0.0.1:${port}` });
		await until(() => new Set(values().map((sample) => sample.key)).size === 2, 20_000);
	}, 30_000);
});

describe('a value that was dropped before this one', () => {
	it('is noted where a server keeps too short a queue between two publishings', async () => {
		const small = await startOpcuaSimulator({
			port: await freePort(),
			namespace: NAMESPACE,
			longestQueue: 3,
			variables: [{ name: 'FAST', value: 0 }],
		});
		running.push(() => small.stop());
		const { samples, events } = await open(wanted(['FAST'], 20), {
			endpoint_url: small.endpointUrl,
			publishing_interval_ms: 1_000,
		});
		await until(() => samples.length >= 1);
		for (let i = 1; i <= 120; i += 1) {
			small.set('FAST', i);
			await new Promise((resolve) => setTimeout(resolve, 20));
		}
		await until(() => valueOf(samples.at(-1)) === 120);
		expect(samples.length).toBeLessThan(60);
		expect(samples.some((sample) => sample.gapBefore === true)).toBe(true);
		expect(events).toContain('values-dropped');
	}, 20_000);

	it.each([
		['Overflow | InfoTypeDataValue', 0x00000480],
		['Overflow', 0x00000080],
	] as const)('is noted by %s, and the status is passed on without it [OPC 10000-4 §7.39]', (bits, code) => {
		const statusCode = StatusCode.makeStatusCode(StatusCodes.Good, bits);
		expect(statusCode.value).toBe(code);
		const dataValue = new DataValue({ value: { dataType: DataType.Double, value: 1 }, statusCode });
		expect(toSample(1, dataValue, 0)).toMatchObject({ gapBefore: true, sourceQuality: 0 });
	});
});

describe('a server that restarts', () => {
	it('ends the link, and a link opened again brings every tag', async () => {
		const first = await open(wanted(NAMES));
		await until(() => first.values().length >= 10);
		await server.restart();
		await expect(first.link.closed).rejects.toMatchObject({ name: 'SourceError' });
		const again = await open(wanted(NAMES));
		await until(() => new Set(again.values().map((sample) => sample.key)).size === 10);
	}, 30_000);

	it('without three of its nodes: exactly those three are bad, the others go on', async () => {
		await server.restart({ without: ['V7', 'V8', 'V9'] });
		const { samples, results, link } = await open(wanted(NAMES));
		await until(() => samples.length >= 10);
		expect(samples.filter((sample) => sample.fault?.code === 'node-missing').map((sample) => sample.key)).toEqual([8, 9, 10]);
		expect(results.filter((result) => !result.ok).map((result) => result.key)).toEqual([8, 9, 10]);
		expect(link.advice).toMatchObject({ code: 'nodes-missing' });
		await server.restart();
	}, 30_000);

	it('with its namespaces in another order: the values are the same, never another node’s', async () => {
		server.set('V5', 55.5);
		await server.restart({ extraNamespaceFirst: true });
		const { values } = await open(wanted(['V5']));
		await until(() => values().length >= 1);
		expect(valueOf(values()[0])).toBe(55.5);
		await server.restart();
	}, 30_000);

	it('a namespace that the server does not know is said, not guessed', async () => {
		const { samples, link } = await open([
			{ key: 1, address: { kind: 'opcua', nodeId: 'nsu=urn:nowhere;s=V0', indexRange: null }, intervalMs: 100 },
		]);
		await until(() => samples.length >= 1);
		expect(samples[0]?.fault).toMatchObject({ code: 'namespace-missing' });
		expect(link.advice?.code).toBe('namespace-missing');
		expect(link.advice?.text).toContain('urn:nowhere');
	});

	it('a folder mapped as if it were a value gets advice of its own', async () => {
		const { samples, link } = await open(wanted(['Gateway', 'V0', 'V1']));
		await until(() => samples.length >= 3);
		expect(link.advice).toMatchObject({ code: 'nodes-without-value' });
		expect(link.advice?.text).toMatch(/^1 of 3 nodes /);
	});
});

describe('security', () => {
	const secure = { security_mode: 'SignAndEncrypt', security_policy: 'Basic256Sha256' } as const;

	it('reports a certificate that nobody trusts yet, and connects once it was trusted', async () => {
		const source = createOpcuaSource(settingsOf(secure), context());
		const report = await source.test(AbortSignal.timeout(20_000));
		expect(report).toMatchObject({ ok: false, advice: { code: 'certificate-unknown' } });
		const found = report.certificate;
		if (!found) throw new Error('no certificate was reported');
		expect(found.fingerprint).toMatch(/^([0-9A-F]{2}:){31}[0-9A-F]{2}$/);
		const trusted = join(folder, 'pki', 'trusted', 'certs');
		mkdirSync(trusted, { recursive: true });
		writeFileSync(join(trusted, `${found.fingerprint.replaceAll(':', '')}.der`), found.der);
		const { values } = await open(wanted(['V0']), secure);
		await until(() => values().length >= 1);
	}, 40_000);

	it('says what is wrong with a user name that the server refuses', async () => {
		const source = createOpcuaSource(settingsOf({ user_name: 'somebody', password: 'wrong' }), context());
		expect(await source.test(AbortSignal.timeout(20_000))).toMatchObject({ ok: false, advice: { code: 'user-refused' } });
	}, 20_000);

	it('says what is wrong with a port that nobody listens on', async () => {
		const source = createOpcuaSource(opcuaSettings.parse({ endpoint_url: `opc.tcp://127.0.0.1:${await freePort()}` }), context());
		expect(await source.test(AbortSignal.timeout(20_000))).toMatchObject({ ok: false, advice: { code: 'refused' } });
	}, 20_000);
});

describe('looking through a server', () => {
	it('shows values with unit and range, by the form in which they are stored', async () => {
		const source = createOpcuaSource(settingsOf(), context());
		const top = await source.browse?.(null, AbortSignal.timeout(10_000));
		const gateway = top?.find((item) => item.name === 'Gateway');
		expect(gateway).toMatchObject({ node: `nsu=${NAMESPACE};s=Gateway`, hasChildren: true });
		const values = await source.browse?.(gateway?.node ?? '', AbortSignal.timeout(10_000));
		expect(values?.find((item) => item.name === 'V0')).toMatchObject({
			node: `nsu=${NAMESPACE};s=V0`,
			isValue: true,
			unit: 'mm/s',
			low: 0,
			high: 50,
			dataType: 'Double',
		});
	}, 20_000);
});
