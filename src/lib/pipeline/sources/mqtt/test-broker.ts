// Edge: sources. May touch: protocol clients, sockets. Not: database, tag map, scaling.
import { randomBytes } from 'node:crypto';
import { lookup } from 'node:dns/promises';
import { connect as connectSocket } from 'node:net';
import { connect, type MqttClient } from 'mqtt';
import type { MqttSettings } from '#lib/domain/source-settings.ts';
import type { TestReport, TestStep } from '../source.ts';
import { adviceOf, SPARKPLUG_UNSUPPORTED } from './advice.ts';
import { connectOptions } from './connect-options.ts';
import { subscribe } from './subscription.ts';

const FIRST_MESSAGE_MS = 3_000;
const SOCKET_MS = 5_000;
const PORTS: Record<string, number> = { 'mqtt:': 1883, 'mqtts:': 8883, 'ws:': 80, 'wss:': 443 };

/** Step by step with an id of its own and a session that leaves nothing behind, beside whatever runs. Never throws. */
export async function testBroker(settings: MqttSettings, signal: AbortSignal): Promise<TestReport> {
	const steps: TestStep[] = [];
	const run = async (name: string, step: () => Promise<string>) => {
		const began = performance.now();
		try {
			signal.throwIfAborted();
			const detail = await step();
			steps.push({ name, ok: true, detail, ms: Math.round(performance.now() - began) });
		} catch (error) {
			const detail = adviceOf(error, settings.url).text;
			steps.push({ name, ok: false, detail, ms: Math.round(performance.now() - began) });
			throw error;
		}
	};
	let client: MqttClient | null = null;
	try {
		const url = new URL(settings.url);
		const port = Number(url.port) || (PORTS[url.protocol] ?? 1883);
		const host = url.hostname.replace(/^\[|\]$/g, '');
		await run('Name', async () => `${host} is ${(await lookup(host)).address}`);
		await run('Port', () => openPort(host, port, signal));
		const id = `millrace-test-${randomBytes(6).toString('hex')}`;
		const used = connect(settings.url, { ...connectOptions(settings, id, true), manualConnect: true });
		client = used;
		await run('Connect', () => connected(used, signal, settings.protocol_version));
		const first = firstMessage(used, signal);
		await run('Subscribe', async () => {
			const [grant] = await subscribe(used, ['#'], settings.qos);
			if (!grant || grant.code >= 0x80) return 'the broker does not let us listen to everything; it may to single topics';
			return `granted QoS ${grant.code}`;
		});
		await run('First message', async () => {
			const topic = await first;
			return topic === null ? 'none within 3 s; nothing is published just now' : `from ${topic}`;
		});
		if (settings.payload === 'sparkplug') {
			steps.push({ name: 'Payload', ok: false, detail: SPARKPLUG_UNSUPPORTED.text });
			return { ok: false, steps, advice: SPARKPLUG_UNSUPPORTED };
		}
		return { ok: true, steps, advice: null };
	} catch (error) {
		return { ok: false, steps, advice: adviceOf(error, settings.url) };
	} finally {
		client?.end(true);
	}
}

function openPort(host: string, port: number, signal: AbortSignal): Promise<string> {
	return new Promise((resolve, reject) => {
		const socket = connectSocket({ host, port, signal, timeout: SOCKET_MS });
		socket.once('connect', () => {
			socket.destroy();
			resolve(`${port} is open`);
		});
		socket.once('timeout', () => {
			socket.destroy();
			reject(Object.assign(new Error('no answer'), { code: 'ETIMEDOUT' }));
		});
		socket.once('error', reject);
	});
}

function connected(client: MqttClient, signal: AbortSignal, version: 4 | 5): Promise<string> {
	return new Promise((resolve, reject) => {
		client.once('connect', () => resolve(`MQTT ${version === 5 ? '5' : '3.1.1'}`));
		client.on('error', reject);
		client.once('close', () => reject(new Error('the broker closed the connection')));
		signal.addEventListener('abort', () => reject(signal.reason as Error), { once: true });
		client.connect();
	});
}

function firstMessage(client: MqttClient, signal: AbortSignal): Promise<string | null> {
	return new Promise((resolve) => {
		const late = setTimeout(() => resolve(null), FIRST_MESSAGE_MS);
		const end = (topic: string | null) => {
			clearTimeout(late);
			resolve(topic);
		};
		client.once('message', (topic) => end(topic));
		signal.addEventListener('abort', () => end(null), { once: true });
	});
}
