// Pure.
import type { GlyphState } from '../state/glyph-state.ts';

/** What a source is reached by, in words: `Modbus TCP · gateway-b, port 502`. */
export function sourceWay(kind: string, settings: Record<string, unknown>): string {
	const text = (key: string) => (settings[key] == null ? '' : String(settings[key]));
	if (kind === 'opcua') {
		const safety =
			text('security_mode') === 'None'
				? 'no security'
				: `${text('security_mode') === 'Sign' ? 'signed' : 'signed and encrypted'}, ${text('security_policy')}`;
		return `OPC UA · ${text('endpoint_url')} · ${safety}`;
	}
	if (kind === 'mqtt') {
		return `${text('payload') === 'sparkplug' ? 'Sparkplug B' : 'MQTT'} · ${text('url')} · version ${text('protocol_version') === '5' ? '5' : '3.1.1'}, QoS ${text('qos') || '1'}`;
	}
	const transports: Record<string, string> = { tcp: 'Modbus TCP', 'rtu-over-tcp': 'Modbus RTU over TCP', rtu: 'Modbus RTU' };
	const where =
		text('transport') === 'rtu' ? `${text('path')}, ${text('baud_rate')} baud` : `${text('host')}, port ${text('port') || '502'}`;
	return `${transports[text('transport')] ?? 'Modbus'} · ${where}`;
}

/** The state of a source in words and as a glyph. */
export function sourceState(state: string): { words: string; glyph: GlyphState | null } {
	switch (state) {
		case 'ok':
			return { words: 'answers', glyph: null };
		case 'late':
			return { words: 'part of it is late', glyph: 'stale' };
		case 'lost':
			return { words: 'does not answer', glyph: 'stale' };
		case 'waiting':
			return { words: 'waits for its first answer', glyph: null };
		default:
			return { words: 'switched off', glyph: 'bad' };
	}
}
