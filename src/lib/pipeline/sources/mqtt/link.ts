// Edge: sources. May touch: protocol clients, sockets. Not: database, tag map, scaling.
import type { MqttClient } from 'mqtt';
import type { MqttAddress, WantedAddress } from '#lib/domain/tag-map/address.ts';
import { topicFilterFault } from '#lib/domain/tag-map/topic-filter.ts';
import { SourceError, type AddressResult, type Emit, type Sample, type SourceContext, type SourceLink } from '../source.ts';
import { holdAcknowledgements } from './acknowledge.ts';
import { adviceOf } from './advice.ts';
import { filterCovers, subscriptionCover } from './filters.ts';
import { routeBy, type RouteTopic } from './routing.ts';
import { subscribe, unsubscribe } from './subscription.ts';

/** Messages handed on at once at most. */
const MOST_A_BATCH = 5_000;
/** Topics that nobody wants, unsubscribed by name while they are this few. */
const MOST_UNKNOWN = 1_000;

interface Message {
	topic: string;
	payload: Uint8Array;
	isRetained: boolean;
	receivedAt: number;
}

export interface LinkOptions {
	client: MqttClient;
	url: string;
	qos: 0 | 1;
	/** Filters the broker's session still holds for us, asked once connected; null where it holds none we know of. */
	standing(): ReadonlySet<string> | null;
	emit: Emit;
	signal: AbortSignal;
	context: SourceContext;
	/** Told what the broker holds for us after each change. */
	remember(filters: ReadonlySet<string>): void;
}

/** Over one connection: routes messages to tags, hands them on in order, and acknowledges what was stored or spooled. */
export function openLink(options: LinkOptions): SourceLink {
	const { client, url, qos, emit, signal, context } = options;
	const { observer } = context;
	const gate = holdAcknowledgements(client);
	const subscribed = new Set<string>();
	const granted = new Map<string, number>();
	const unknown = new Set<string>();
	let unknownCount = 0;
	let route: RouteTopic | null = null;
	let waiting: Message[] = [];
	let isEmitting = false;
	let isOver = false;

	let resolve: () => void = () => undefined;
	let reject: (error: SourceError) => void = () => undefined;
	const closed = new Promise<void>((yes, no) => {
		resolve = yes;
		reject = no;
	});
	closed.catch(() => undefined);

	const finish = (error: SourceError | null) => {
		if (isOver) return;
		isOver = true;
		gate.drop();
		waiting = [];
		// The session stays at the broker; only the connection ends.
		client.end(error !== null, () => (error ? reject(error) : resolve()));
	};
	const lose = (cause: unknown) => finish(new SourceError(adviceOf(cause, url), { cause }));

	const notWanted = (topic: string) => {
		unknownCount++;
		if (unknown.has(topic) || unknown.size >= MOST_UNKNOWN) return;
		unknown.add(topic);
		observer.event('note', 'unknown-topic', `No tag wants ${topic}; ${unknownCount} such messages so far.`);
		// An old session may hold a subscription that the map no longer has.
		if (!subscribed.has(topic) && !isOver) unsubscribe(client, [topic]).catch(() => undefined);
	};

	const samplesOf = (messages: readonly Message[], find: RouteTopic): Sample[] => {
		const samples: Sample[] = [];
		for (const message of messages) {
			// An empty payload clears a retained topic and is no value [MQTT-3.3.1-10]; those who listen get it without the flag.
			if (message.payload.length === 0) continue;
			const routes = find(message.topic);
			if (routes.length === 0) notWanted(message.topic);
			for (const { key, hasTime } of routes) {
				const sample: Sample = {
					key,
					receivedAt: message.receivedAt,
					sourceAt: null,
					raw: { kind: 'payload', bytes: message.payload },
					sourceQuality: null,
					fault: null,
				};
				if (message.isRetained && !hasTime) sample.retained = true;
				samples.push(sample);
			}
		}
		return samples;
	};

	const handOn = async () => {
		if (isEmitting) return;
		isEmitting = true;
		try {
			while (!isOver && route && waiting.length > 0) {
				const messages = waiting.slice(0, MOST_A_BATCH);
				waiting = waiting.slice(MOST_A_BATCH);
				const samples = samplesOf(messages, route);
				const answer = samples.length > 0 ? await emit(samples) : 'stored';
				if (isOver) return;
				if (typeof answer === 'object') {
					const text = `${answer.dropped} readings were not taken: ${answer.reason}.`;
					const check = 'The broker keeps them and sends them again; look at disk and database.';
					finish(new SourceError({ code: 'not-stored', text, check }));
					return;
				}
				gate.release(messages.length);
			}
			if (signal.aborted) finish(null);
		} catch (error) {
			lose(error);
		} finally {
			isEmitting = false;
		}
	};

	let isDue = false;
	client.on('message', (topic, payload, packet) => {
		if (isOver) return;
		waiting.push({ topic, payload, isRetained: packet.retain, receivedAt: context.now() });
		observer.request(true, 0);
		if (isDue) return;
		isDue = true;
		setImmediate(() => {
			isDue = false;
			void handOn();
		});
	});
	let lastError: unknown = null;
	client.on('error', (error) => {
		lastError = error;
	});
	client.on('disconnect', (packet) => {
		lastError = Object.assign(new Error(`the broker ended it, reason ${String(packet.reasonCode)}`), { code: packet.reasonCode });
	});
	client.on('close', () => lose(lastError ?? new Error('the broker closed it')));

	const stop = () => {
		if (waiting.length === 0 && !isEmitting) finish(null);
		else if (!route) finish(null);
		else void handOn();
	};
	if (signal.aborted) stop();
	else signal.addEventListener('abort', stop, { once: true });

	const setAddresses = async (wanted: readonly WantedAddress[]): Promise<readonly AddressResult[]> => {
		const faults = new Map<number, string>();
		const usable: (WantedAddress & { address: MqttAddress })[] = [];
		for (const one of wanted) {
			const fault = addressFault(one);
			if (fault) faults.set(one.key, fault);
			else if (one.address.kind === 'mqtt') usable.push({ ...one, address: one.address });
		}
		if (!route) for (const filter of options.standing() ?? []) subscribed.add(filter);
		const cover = subscriptionCover(usable.map(({ address }) => address.topic));
		const fresh = cover.filter((filter) => !subscribed.has(filter));
		const kept = new Set(cover);
		const gone = [...subscribed].filter((filter) => !kept.has(filter));
		granted.forEach((_, filter) => !kept.has(filter) && granted.delete(filter));
		// First the new ones and the new routes, then the old go: a topic that moves to a wider filter loses nothing.
		route = routeBy(usable);
		unknown.clear();
		for (const { filter, code } of await subscribe(client, fresh, qos)) {
			granted.set(filter, code);
			if (code < 0x80) subscribed.add(filter);
			if (code < qos) observer.event('warning', 'lower-qos', `The broker grants only QoS ${code} for ${filter}.`);
			if (code >= 0x80) observer.event('error', 'subscribe-refused', `The broker refuses ${filter}, code ${code}.`);
		}
		await unsubscribe(client, gone);
		for (const filter of gone) subscribed.delete(filter);
		options.remember(subscribed);
		void handOn();
		const refused = [...granted].filter(([, code]) => code >= 0x80).map(([filter]) => filter);
		for (const { key, address } of usable) {
			const by = refused.find((filter) => filterCovers(filter, address.topic));
			if (by) faults.set(key, `the broker refuses the subscription ${by}, code ${String(granted.get(by))}`);
		}
		return wanted.map(({ key }): AddressResult => {
			const detail = faults.get(key);
			return detail ? { key, ok: false, detail } : { key, ok: true };
		});
	};

	return { setAddresses, closed };
}

function addressFault({ address }: WantedAddress): string | null {
	if (address.kind !== 'mqtt') return `an MQTT source has no ${address.kind} addresses`;
	if (address.topic.startsWith('$share/')) return 'shared subscriptions would split the messages between readers';
	return topicFilterFault(address.topic);
}
