// Edge: simulators. May touch: protocol servers, domain.
import { createServer, type IncomingMessage } from 'node:http';
import { z } from 'zod';
import type { MqttSimulator } from '../mqtt/mqtt-simulator.ts';
import type { ReceiverSimulator } from '../receiver/receiver-simulator.ts';
import { EVENT_NAMES, EVENTS, type EventName } from '../scenario/events.ts';
import type { Plant } from '../scenario/plant.ts';
import type { SmtpSimulator } from '../smtp/smtp-simulator.ts';

export interface ControlOptions {
	port: number;
	plant: Plant;
	mqtt: MqttSimulator;
	smtp: SmtpSimulator;
	receiver: ReceiverSimulator;
	/** What a device does when an event is asked for, beside what the plant does. */
	actions: Partial<Record<EventName, (lastsMs: number) => Promise<void> | void>>;
}
export interface ControlPort {
	readonly port: number;
	stop(): Promise<void>;
}

const body = z.strictObject({
	lasts_s: z.number().positive().max(604_800).optional(),
	grows_s: z.number().min(0).max(604_800).optional(),
});
const failure = z.strictObject({
	count: z.number().int().min(0).max(10_000),
	status: z.number().int().min(400).max(599).optional(),
});
const refusal = z.strictObject({ refuse: z.boolean() });

/** Answers on 127.0.0.1: what happens at the plant, and what should happen now. */
export function startControlPort(options: ControlOptions): Promise<ControlPort> {
	const server = createServer((request, response) => {
		answer(options, request).then(
			([status, value]) => {
				response.writeHead(status, { 'content-type': 'application/json' });
				response.end(JSON.stringify(value));
			},
			(error: unknown) => {
				response.writeHead(400, { 'content-type': 'application/json' });
				response.end(JSON.stringify({ detail: error instanceof Error ? error.message : String(error) }));
			},
		);
	});
	return new Promise((resolve, reject) => {
		server.once('error', reject);
		server.listen(options.port, '127.0.0.1', () => {
			const address = server.address();
			resolve({
				port: address !== null && typeof address === 'object' ? address.port : options.port,
				stop: () =>
					new Promise<void>((done) => {
						server.close(() => done());
						server.closeAllConnections();
					}),
			});
		});
	});
}

async function answer(options: ControlOptions, request: IncomingMessage): Promise<[number, unknown]> {
	const { plant } = options;
	const now = Date.now();
	const path = new URL(request.url ?? '/', 'http://127.0.0.1').pathname;
	const route = `${request.method ?? 'GET'} ${path}`;
	switch (route) {
		case 'GET /events':
			return [200, { items: EVENT_NAMES.map((name) => ({ name, title: EVENTS[name].title, active: plant.event(name, now) })) }];
		case 'GET /mails':
			return [200, { items: options.smtp.mails() }];
		case 'GET /received':
			return [200, { items: options.receiver.received() }];
		case 'POST /receiver/fail': {
			const { count, status } = failure.parse(await read(request));
			options.receiver.fail(count, status);
			return [200, { count }];
		}
		case 'POST /smtp/refuse':
			options.smtp.refuse(refusal.parse(await read(request)).refuse);
			return [200, {}];
		case 'POST /mqtt/restart':
			await options.mqtt.restart();
			return [200, {}];
	}
	const name = EVENT_NAMES.find((one) => path === `/events/${one}`);
	if (!name) return [404, { detail: `nothing at ${path}` }];
	if (request.method === 'DELETE') {
		plant.calm(name);
		return [200, { name }];
	}
	if (request.method !== 'POST') return [405, { detail: 'POST to make it happen, DELETE to end it' }];
	const { lasts_s, grows_s } = body.parse(await read(request));
	const lastsMs = lasts_s === undefined ? EVENTS[name].lastsMs : lasts_s * 1_000;
	const event = plant.provoke(name, { at: now, lastsMs, growsMs: (grows_s ?? 0) * 1_000 });
	await options.actions[name]?.(lastsMs);
	return [200, event];
}

async function read(request: IncomingMessage): Promise<unknown> {
	let text = '';
	for await (const chunk of request) {
		text += String(chunk);
		if (text.length > 10_000) throw new Error('the body is too long');
	}
	return text === '' ? {} : JSON.parse(text);
}
