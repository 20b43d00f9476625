// Edge: sources. May touch: protocol clients, sockets. Not: database, tag map, scaling.
import type { ClientSubscribeCallback, MqttClient } from 'mqtt';

/** Filters in one SUBSCRIBE; brokers limit the size of a packet. */
const FILTERS_A_PACKET = 100;

/** A filter and what the broker granted: a QoS, or a reason code from 0x80 [MQTT-3.9.3-1]. */
export interface Grant {
	filter: string;
	code: number;
}

/** Subscribes and gives the answer to each filter; a refusal is an answer, only a lost connection rejects. */
export async function subscribe(client: MqttClient, filters: readonly string[], qos: 0 | 1): Promise<Grant[]> {
	const grants: Grant[] = [];
	for (let from = 0; from < filters.length; from += FILTERS_A_PACKET) {
		grants.push(...(await subscribeSome(client, filters.slice(from, from + FILTERS_A_PACKET), qos)));
	}
	return grants;
}

function subscribeSome(client: MqttClient, filters: string[], qos: 0 | 1): Promise<Grant[]> {
	return new Promise((resolve, reject) => {
		const answer: ClientSubscribeCallback = (error, _subscriptions, packet) => {
			const codes = packet?.granted;
			if (!codes || codes.length !== filters.length) {
				reject(error ?? new Error('the broker answered a subscription without its codes'));
				return;
			}
			resolve(filters.map((filter, index) => ({ filter, code: Number(codes[index]) })));
		};
		client.subscribe(filters, { qos }, answer);
	});
}

export async function unsubscribe(client: MqttClient, filters: readonly string[]): Promise<void> {
	for (let from = 0; from < filters.length; from += FILTERS_A_PACKET) {
		await client.unsubscribeAsync(filters.slice(from, from + FILTERS_A_PACKET));
	}
}
