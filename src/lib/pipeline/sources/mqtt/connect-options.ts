// Pure.
import type { IClientOptions } from 'mqtt';
import type { MqttSettings } from '#lib/domain/source-settings.ts';

/** How long a broker keeps the session of a version 5 client that is away, in seconds: a week. */
const SESSION_EXPIRY_S = 7 * 86_400;
const CONNECT_TIMEOUT_MS = 10_000;
const KEEPALIVE_S = 30;
/** Messages a version 5 broker may have in flight to us. */
const RECEIVE_MAXIMUM = 10_000;

/** Options of one connection; coming back is the business of who opened it, so the client itself never reconnects. */
export function connectOptions(settings: MqttSettings, clientId: string, clean: boolean): IClientOptions {
	return {
		clientId,
		clean,
		protocolVersion: settings.protocol_version,
		keepalive: KEEPALIVE_S,
		connectTimeout: CONNECT_TIMEOUT_MS,
		reconnectPeriod: 0,
		resubscribe: false,
		...(settings.user_name ? { username: settings.user_name } : {}),
		...(settings.password ? { password: settings.password } : {}),
		...(settings.ca ? { ca: settings.ca } : {}),
		...(settings.protocol_version === 5
			? { properties: { receiveMaximum: RECEIVE_MAXIMUM, ...(clean ? {} : { sessionExpiryInterval: SESSION_EXPIRY_S }) } }
			: {}),
	};
}
