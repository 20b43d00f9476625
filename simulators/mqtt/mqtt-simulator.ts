// Edge: simulators. May touch: protocol servers, domain.
import { createServer, type Server, type Socket } from 'node:net';
import { Aedes } from 'aedes';
import type { Plant } from '../scenario/plant.ts';
import { topicOf } from './topic.ts';

export interface MqttSimulator {
	readonly port: number;
	/** Ends the broker and starts a new one that has forgotten every session and retained message. */
	restart(): Promise<void>;
	/** Cuts every connection; sessions stay. */
	dropConnections(): void;
	publish(topic: string, payload: string, options?: { retain?: boolean; qos?: 0 | 1 }): Promise<void>;
	stop(): Promise<void>;
}
export interface MqttSimulatorOptions {
	port: number;
	plant: Plant;
	/** Publishes the plant's wired values; off for tests that publish themselves. */
	publishes?: boolean;
	now?: () => number;
	tickMs?: number;
}

/** A broker on 127.0.0.1 with the pump hall's publishers inside. */
export async function startMqttSimulator(options: MqttSimulatorOptions): Promise<MqttSimulator> {
	const now = options.now ?? Date.now;
	const sockets = new Set<Socket>();
	let broker = await Aedes.createBroker();
	let server = await listen(broker, options.port, sockets);
	const signals = options.plant.signals.filter((signal) => signal.gateway === 'broker');
	const port = portOf(server);

	const publish: MqttSimulator['publish'] = (topic, payload, { retain = false, qos = 1 } = {}) =>
		new Promise((resolve, reject) => {
			broker.publish({ cmd: 'publish', topic, payload: Buffer.from(payload), qos, retain, dup: false }, (error?: Error | null) =>
				error ? reject(error) : resolve(),
			);
		});

	let told = now();
	const tick = async () => {
		const until = now();
		for (const signal of signals) {
			for (const reading of options.plant.arrivals(signal.path, told, until)) {
				const payload = JSON.stringify({
					value: reading.value,
					time: new Date(reading.measuredAt).toISOString(),
					good: reading.status !== 'bad',
				});
				await publish(topicOf(signal), payload);
			}
		}
		if (options.plant.event('mqtt-drop', until) && !options.plant.event('mqtt-drop', told)) dropConnections();
		told = until;
	};
	const dropConnections = () => {
		for (const socket of sockets) socket.destroy();
	};
	let timer: NodeJS.Timeout | null = null;
	let isStopped = false;
	const loop = () => {
		if (isStopped) return;
		timer = setTimeout(() => {
			tick().then(loop, loop);
		}, options.tickMs ?? 250);
	};
	if (options.publishes ?? true) loop();

	const close = async () => {
		dropConnections();
		await new Promise<void>((resolve) => server.close(() => resolve()));
		await new Promise<void>((resolve) => broker.close(() => resolve()));
	};
	return {
		port,
		publish,
		dropConnections,
		async restart() {
			await close();
			broker = await Aedes.createBroker();
			server = await listen(broker, port, sockets);
		},
		async stop() {
			isStopped = true;
			if (timer) clearTimeout(timer);
			await close();
		},
	};
}

function portOf(server: Server): number {
	const address = server.address();
	if (address === null || typeof address === 'string') throw new Error('the broker has no port');
	return address.port;
}

function listen(broker: Aedes, port: number, sockets: Set<Socket>): Promise<Server> {
	const server = createServer((socket) => {
		sockets.add(socket);
		socket.once('close', () => sockets.delete(socket));
		broker.handle(socket);
	});
	return new Promise((resolve, reject) => {
		server.once('error', reject);
		server.listen(port, '127.0.0.1', () => resolve(server));
	});
}
