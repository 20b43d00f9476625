// Edge: sources. May touch: protocol clients, sockets. Not: database, tag map, scaling.
import type { MqttClient } from 'mqtt';

/** Messages received and not yet acknowledged, after which the reader waits. Below 65,535, the message ids there are. */
export const MOST_HELD = 20_000;

type SendPacket = (packet: { cmd: string; messageId?: number }, done?: (error?: Error) => void) => void;

export interface AckGate {
	/** Sends the PUBACKs of the first `count` messages received, in the order of their arrival [MQTT-4.6.0-2]. */
	release(count: number): void;
	/** Forgets what is held: the broker sends it again on the next connection. */
	drop(): void;
	readonly held: number;
}

/**
 * Takes the PUBACK out of the client's reader: the reader goes on at once, the PUBACK waits for `release`.
 * The client writes it through a private method, the one place of it that is touched; a client without that method is refused.
 */
export function holdAcknowledgements(client: MqttClient, most: number = MOST_HELD): AckGate {
	const send: unknown = Reflect.get(client, '_sendPacket');
	if (typeof send !== 'function') throw new Error('this version of the MQTT client cannot hold acknowledgements back');
	const pass = send.bind(client) as SendPacket;
	let waiting: (number | undefined)[] = [];
	let readers: (() => void)[] = [];

	const goOn = () => {
		const ready = readers;
		readers = [];
		for (const reader of ready) reader();
	};
	const take = (messageId: number | undefined, done: (() => void) | undefined) => {
		waiting.push(messageId);
		if (waiting.length < most) done?.();
		else if (done) readers.push(done);
	};
	const gated: SendPacket = (packet, done) => {
		if (packet.cmd === 'puback') take(packet.messageId, done);
		else pass(packet, done);
	};
	Reflect.set(client, '_sendPacket', gated);
	// A message of QoS 0 has no PUBACK; it takes its place in the order all the same.
	client.handleMessage = (packet, callback) => {
		if (packet.qos === 0) take(undefined, callback);
		else callback();
	};

	return {
		release(count) {
			const released = waiting.slice(0, count);
			waiting = waiting.slice(count);
			for (const messageId of released) if (messageId !== undefined) pass({ cmd: 'puback', messageId });
			if (waiting.length < most) goOn();
		},
		drop() {
			waiting = [];
			goOn();
		},
		get held() {
			return waiting.length;
		},
	};
}
