// Pure.
import type { Advice } from '../source.ts';

/** Reason codes of CONNACK, those of 3.1.1 [MQTT-3.2.2-6] and of 5.0 §3.2.2.2. */
const REFUSED: Record<number, Advice> = {
	1: version(),
	2: identifier(),
	3: busy(),
	4: password(),
	5: notAllowed(),
	132: version(),
	133: identifier(),
	134: password(),
	135: notAllowed(),
	136: busy(),
	137: busy(),
};

function version(): Advice {
	return {
		code: 'mqtt-version',
		text: 'The broker does not speak this protocol version.',
		check: 'Set the protocol version to 4 (MQTT 3.1.1), which nearly every broker speaks.',
	};
}
function identifier(): Advice {
	return {
		code: 'client-id-refused',
		text: 'The broker refuses this client id.',
		check: 'Ask who runs the broker which client ids are allowed, and set one.',
	};
}
function busy(): Advice {
	return {
		code: 'broker-unavailable',
		text: 'The broker answers that it is not available now.',
		check: 'Look whether the broker is starting or overloaded.',
	};
}
function password(): Advice {
	return {
		code: 'bad-credentials',
		text: 'The broker refuses the user name or password.',
		check: 'Enter user name and password again.',
	};
}
function notAllowed(): Advice {
	return {
		code: 'not-authorized',
		text: 'The broker does not allow this user to connect.',
		check: 'Check user name and password, then the access list of the broker.',
	};
}

/** What to say of an error from the client or its socket. */
export function adviceOf(error: unknown, url: string): Advice {
	const code: unknown = typeof error === 'object' && error !== null && 'code' in error ? error.code : null;
	const message = error instanceof Error ? error.message : String(error);
	const refused = typeof code === 'number' ? REFUSED[code] : undefined;
	if (refused) return refused;
	switch (code) {
		case 'ECONNREFUSED':
			return {
				code: 'port-closed',
				text: `Nothing listens at ${url}.`,
				check: 'Check that the broker runs and that the port is right (usually 1883, with TLS 8883).',
			};
		case 'ENOTFOUND':
		case 'EAI_AGAIN':
			return { code: 'name-unknown', text: `The name in ${url} is not known.`, check: 'Check the spelling and the DNS server.' };
		case 'EHOSTUNREACH':
		case 'ENETUNREACH':
		case 'ETIMEDOUT':
			return { code: 'no-route', text: `${url} cannot be reached.`, check: 'Check the cable, the route and the firewall.' };
	}
	if (/certificate|self.signed|unable to verify|altname/i.test(`${String(code)} ${message}`)) {
		return {
			code: 'certificate',
			text: `The broker's certificate is not trusted: ${message}.`,
			check: 'Enter the certificate of the authority that signed it, and use the name the certificate bears.',
		};
	}
	if (/connack timeout|timed out|timeout/i.test(message)) {
		return {
			code: 'no-connack',
			text: `${url} took the connection but did not answer as an MQTT broker.`,
			check: 'Check that the port speaks MQTT and whether it wants TLS (mqtts://).',
		};
	}
	return {
		code: 'connection-lost',
		text: `The connection to ${url} failed: ${message}.`,
		check: 'Look in the log of the broker.',
	};
}

export const DUPLICATE_CLIENT_ID: Advice = {
	code: 'duplicate-client-id',
	text: 'The broker closes the connection right after it is made, again and again.',
	check: 'Look whether another client uses the same client id; a broker keeps only the newest of them.',
};

export const SPARKPLUG_UNSUPPORTED: Advice = {
	code: 'payload-unsupported',
	text: 'Sparkplug payloads cannot be read here.',
	check: 'Set the payload to json, or have the edge node publish JSON beside Sparkplug.',
};
