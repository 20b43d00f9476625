// Edge: sources. May touch: protocol clients, sockets. Not: database, tag map, scaling.
import { connect, type MqttClient } from 'mqtt';
import type { MqttSettings } from '#lib/domain/source-settings.ts';
import { SourceError, type Source, type SourceContext } from '../source.ts';
import { adviceOf, DUPLICATE_CLIENT_ID, SPARKPLUG_UNSUPPORTED } from './advice.ts';
import { connectOptions } from './connect-options.ts';
import { openLink } from './link.ts';
import { testBroker } from './test-broker.ts';

/** Lost within this of being made: another client may be taking the id from us. */
const SOON_MS = 5_000;
const DROPS_A_MINUTE = 3;

export interface MqttSourceContext extends SourceContext {
	sourceId: string;
}

/**
 * A broker as a source. One client id for good and a session that stays, so that the broker keeps at QoS 1 what comes while we are away;
 * a message is acknowledged only when it is stored or spooled.
 */
export function createMqttSource(settings: MqttSettings, context: MqttSourceContext): Source {
	const clientId = settings.client_id ?? `millrace-${context.sourceId}`;
	let standing: ReadonlySet<string> | null = null;
	let drops: number[] = [];

	/** Counts a connection that did not last; true when there were too many in the last minute. */
	const dropped = (connectedAt: number): boolean => {
		const now = context.now();
		drops = drops.filter((at) => now - at < 60_000);
		if (now - connectedAt < SOON_MS) drops.push(now);
		return drops.length > DROPS_A_MINUTE;
	};

	return {
		async open(emit, signal) {
			if (settings.payload === 'sparkplug') throw new SourceError(SPARKPLUG_UNSUPPORTED);
			const client = connect(settings.url, { ...connectOptions(settings, clientId, false), manualConnect: true });
			// Messages of a standing session follow the CONNACK at once: the link listens before the connection begins.
			const connected = untilConnected(client, settings.url, signal);
			let isResumed = false;
			client.on('connect', (packet) => {
				isResumed = packet.sessionPresent;
			});
			const link = openLink({
				client,
				url: settings.url,
				qos: settings.qos,
				standing: () => (isResumed ? standing : null),
				emit,
				signal,
				context,
				remember: (filters) => {
					standing = new Set(filters);
				},
			});
			client.connect();
			try {
				await connected;
			} catch (error) {
				client.end(true);
				throw error;
			}
			const connectedAt = context.now();
			context.observer.event(
				'note',
				'connected',
				isResumed ? 'Connected; the broker kept our session.' : 'Connected; the broker holds no session of ours.',
			);
			const closed = link.closed.catch((error: unknown) => {
				if (dropped(connectedAt)) throw new SourceError(DUPLICATE_CLIENT_ID, { cause: error });
				throw error;
			});
			closed.catch(() => undefined);
			return { setAddresses: (wanted) => link.setAddresses(wanted), closed, test: (stop) => testBroker(settings, stop) };
		},
		test: (signal) => testBroker(settings, signal),
	};
}

/** Resolves on CONNACK with success; rejects with advice on anything else. */
function untilConnected(client: MqttClient, url: string, signal: AbortSignal): Promise<void> {
	return new Promise((resolve, reject) => {
		const fail = (cause: unknown) => reject(new SourceError(adviceOf(cause, url), { cause }));
		client.once('connect', () => resolve());
		client.once('error', fail);
		client.once('close', () => fail(new Error('the broker closed the connection before it answered')));
		if (signal.aborted) fail(signal.reason);
		else signal.addEventListener('abort', () => fail(signal.reason), { once: true });
	});
}
