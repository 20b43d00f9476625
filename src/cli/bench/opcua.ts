// Edge: cli. May touch: the OPC UA source, node-opcua, a peer. Value changes a second through the adapter against a bare subscription.
import { mkdtempSync, rmSync } from 'node:fs';
import { tmpdir } from 'node:os';
import { join } from 'node:path';
import { AttributeIds, ClientMonitoredItemGroup, OPCUAClient, ClientSubscription, TimestampsToReturn } from 'node-opcua';
import { opcuaSettings } from '#lib/domain/source-settings.ts';
import { createOpcuaSource } from '#lib/pipeline/sources/opcua/opcua-source.ts';
import { findFreePort } from '../throwaway-product.ts';
import { benchLine, median, type BenchLine } from './line.ts';
import { cpuSeconds, startPeer } from './peer.ts';

const ROUNDS = 5;
const ROUND_MS = 5_000;
const ITEMS = 2_000;
const CHANGE_MS = 100;
const PUBLISH_MS = 100;

/** Ours and the reference in turn at the same server. */
export async function benchOpcua(): Promise<BenchLine> {
	const port = await findFreePort();
	const folder = mkdtempSync(join(tmpdir(), 'millrace-bench-'));
	const peer = await startPeer('opcua-peer.ts', [String(port), String(ITEMS), String(CHANGE_MS)]);
	const ours: number[] = [];
	const reference: number[] = [];
	const cpu: { ours: number[]; reference: number[] } = { ours: [], reference: [] };
	try {
		for (let round = 0; round < ROUNDS; round += 1) {
			for (const [list, cost, run] of [
				[ours, cpu.ours, adapter],
				[reference, cpu.reference, bareSubscription],
			] as const) {
				const { changes, seconds, cpuS } = await run(`opc.tcp://127.0.0.1:${port}`, folder);
				list.push(changes / seconds);
				cost.push(cpuS / changes);
			}
		}
	} finally {
		await peer.stop();
		rmSync(folder, { recursive: true, force: true });
	}
	return {
		...benchLine(
			'opcua',
			ours,
			reference,
			'changes/s',
			`${ITEMS} monitored items that change every ${CHANGE_MS} ms against a bare subscription with an empty handler`,
		),
		cpu_ratio: Math.round((median(cpu.ours) / median(cpu.reference)) * 1_000) / 1_000,
	};
}

interface Measured {
	changes: number;
	seconds: number;
	cpuS: number;
}

/** Counts for a while once values flow; what connecting costs is not part of it. */
async function measure(count: () => number): Promise<Measured> {
	const begin = performance.now();
	while (count() < ITEMS) {
		if (performance.now() - begin > 30_000) throw new Error(`only ${count()} values came`);
		await new Promise((resolve) => setTimeout(resolve, 50));
	}
	const [first, cpu, started] = [count(), cpuSeconds(), performance.now()];
	await new Promise((resolve) => setTimeout(resolve, ROUND_MS));
	return { changes: count() - first, seconds: (performance.now() - started) / 1_000, cpuS: cpuSeconds() - cpu };
}

async function adapter(endpointUrl: string, folder: string): Promise<Measured> {
	let changes = 0;
	const stop = new AbortController();
	const source = createOpcuaSource(opcuaSettings.parse({ endpoint_url: endpointUrl, publishing_interval_ms: PUBLISH_MS }), {
		observer: { event: () => undefined, exchange: () => undefined, request: () => undefined, clockSkew: () => undefined },
		pkiFolder: join(folder, 'pki'),
		installationId: 'bench',
		now: Date.now,
	});
	const link = await source.open((samples) => {
		for (const sample of samples) if (!sample.confirms) changes += 1;
		return Promise.resolve('stored');
	}, stop.signal);
	await link.setAddresses(
		Array.from({ length: ITEMS }, (_, n) => ({
			key: n + 1,
			intervalMs: CHANGE_MS,
			address: { kind: 'opcua' as const, nodeId: `nsu=urn:bench:plant;s=V${n}`, indexRange: null },
		})),
	);
	const measured = await measure(() => changes);
	stop.abort();
	await link.closed.catch(() => undefined);
	return measured;
}

async function bareSubscription(endpointUrl: string): Promise<Measured> {
	const client = OPCUAClient.create({ endpointMustExist: false, keepSessionAlive: true });
	await client.connect(endpointUrl);
	const session = await client.createSession();
	const namespace = (await session.readNamespaceArray()).indexOf('urn:bench:plant');
	const subscription = ClientSubscription.create(session, {
		requestedPublishingInterval: PUBLISH_MS,
		requestedLifetimeCount: 1_000,
		requestedMaxKeepAliveCount: 20,
		maxNotificationsPerPublish: 0,
		publishingEnabled: true,
		priority: 1,
	});
	let changes = 0;
	const group = ClientMonitoredItemGroup.create(
		subscription,
		Array.from({ length: ITEMS }, (_, n) => ({ nodeId: `ns=${namespace};s=V${n}`, attributeId: AttributeIds.Value })),
		{ samplingInterval: CHANGE_MS, discardOldest: true, queueSize: 10 },
		TimestampsToReturn.Both,
	);
	group.on('changed', () => (changes += 1));
	const measured = await measure(() => changes);
	await subscription.terminate();
	await session.close();
	await client.disconnect();
	return measured;
}
