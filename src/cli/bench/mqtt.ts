// Edge: cli. May touch: the MQTT source, the pipeline, the store, mosquitto, a peer. Messages a second to committed rows against a subscriber that only counts.
import { spawn } from 'node:child_process';
import { once } from 'node:events';
import { mkdtempSync, rmSync, writeFileSync } from 'node:fs';
import { tmpdir } from 'node:os';
import { join } from 'node:path';
import { connect as openSocket } from 'node:net';
import { connectAsync } from 'mqtt';
import { mqttSettings } from '#lib/domain/source-settings.ts';
import type { Address } from '#lib/domain/tag-map/address.ts';
import { Pipeline } from '#lib/pipeline/pipeline.ts';
import { createMqttSource } from '#lib/pipeline/sources/mqtt/mqtt-source.ts';
import { createCopyWriter } from '#lib/pipeline/store/copy-writer.ts';
import type { Pool } from '#lib/server/db/pool.ts';
import { findFreePort } from '../throwaway-product.ts';
import { benchLine, type BenchLine } from './line.ts';
import { startPeer } from './peer.ts';
import { barePlan } from './plan.ts';

const ROUNDS = 5;
const MESSAGES = 60_000;
const MOST_MS = 60_000;

/** A payload that is a number. */
const addressOf = (topic: string): Address => ({
	kind: 'mqtt',
	topic,
	valuePointer: null,
	timePointer: null,
	qualityPointer: null,
	timeFormat: 'auto',
});

/** Ours: published to committed. Reference: published to counted. */
export async function benchMqtt(pool: Pool, siteId: number, tagIds: readonly number[]): Promise<BenchLine> {
	const port = await findFreePort();
	const folder = mkdtempSync(join(tmpdir(), 'millrace-bench-'));
	const config = join(folder, 'broker.conf');
	writeFileSync(
		config,
		`listener ${port} 127.0.0.1\nallow_anonymous true\npersistence false\nmax_inflight_messages 1000\nmax_queued_messages 0\n`,
	);
	const broker = spawn('/usr/sbin/mosquitto', ['-c', config], { stdio: 'ignore' });
	await untilOpen(port);
	const peer = await startPeer('mqtt-peer.ts', [String(port), String(tagIds.length)]);
	const ours: number[] = [];
	const reference: number[] = [];
	try {
		for (let round = 0; round < ROUNDS; round += 1) {
			ours.push(await throughStore(port, pool, siteId, tagIds, () => peer.say(String(MESSAGES))));
			reference.push(await counted(port, () => peer.say(String(MESSAGES))));
		}
	} finally {
		await peer.stop();
		const ended = once(broker, 'exit');
		broker.kill('SIGTERM');
		await ended;
		rmSync(folder, { recursive: true, force: true });
	}
	return benchLine(
		'mqtt',
		ours,
		reference,
		'messages/s',
		`${MESSAGES} messages at QoS 1 from two publishers through mosquitto to committed rows, against a bare subscriber that counts`,
	);
}

async function untilOpen(port: number): Promise<void> {
	for (let tries = 0; tries < 100; tries += 1) {
		const isOpen = await new Promise<boolean>((resolve) => {
			const socket = openSocket(port, '127.0.0.1');
			socket.once('connect', () => (socket.destroy(), resolve(true)));
			socket.once('error', () => resolve(false));
		});
		if (isOpen) return;
		await new Promise((resolve) => setTimeout(resolve, 50));
	}
	throw new Error('mosquitto does not listen');
}

/** Waits until `count` has reached all messages; answers messages a second since `begin`. */
async function rateOf(count: () => number): Promise<number> {
	const started = performance.now();
	while (count() < MESSAGES) {
		if (performance.now() - started > MOST_MS) throw new Error(`only ${count()} of ${MESSAGES} messages came`);
		await new Promise((resolve) => setTimeout(resolve, 5));
	}
	return (MESSAGES / (performance.now() - started)) * 1_000;
}

async function throughStore(
	port: number,
	pool: Pool,
	siteId: number,
	tagIds: readonly number[],
	publish: () => void,
): Promise<number> {
	const writer = createCopyWriter(pool, { now: Date.now });
	const pipeline = new Pipeline(writer, Date.now);
	for (const [n, tagId] of tagIds.entries())
		pipeline.setTag(barePlan(siteId, tagId, addressOf(`bench/${n}`)), { judging: null, latest: null });
	const stop = new AbortController();
	const source = createMqttSource(mqttSettings.parse({ url: `mqtt://127.0.0.1:${port}` }), {
		sourceId: `bench-${Math.random().toString(36).slice(2)}`,
		observer: { event: () => undefined, exchange: () => undefined, request: () => undefined, clockSkew: () => undefined },
		pkiFolder: '',
		installationId: 'bench',
		now: Date.now,
	});
	const link = await source.open((samples) => pipeline.accept(samples), stop.signal);
	await link.setAddresses(tagIds.map((tagId, n) => ({ key: tagId, intervalMs: 1_000, address: addressOf(`bench/${n}`) })));
	await new Promise((resolve) => setTimeout(resolve, 500));
	publish();
	const rate = await rateOf(() => pipeline.counts.stored + pipeline.counts.duplicates);
	stop.abort();
	await link.closed;
	await pipeline.close();
	await writer.close();
	return rate;
}

async function counted(port: number, publish: () => void): Promise<number> {
	const client = await connectAsync(`mqtt://127.0.0.1:${port}`, { clientId: 'bare' });
	await client.subscribeAsync('bench/#', { qos: 1 });
	let seen = 0;
	client.on('message', () => (seen += 1));
	publish();
	const rate = await rateOf(() => seen);
	await client.endAsync();
	return rate;
}
