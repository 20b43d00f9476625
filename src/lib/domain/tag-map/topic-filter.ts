// Pure.
/** What is wrong with an MQTT topic filter, or null [MQTT-4.7.1-1..3, MQTT-4.7.3-1..3]. */
export function topicFilterFault(filter: string): string | null {
	if (filter.length === 0) return 'empty; expected a topic such as hall/pump-1/vibration';
	if (new TextEncoder().encode(filter).length > 65_535) return 'longer than 65,535 bytes';
	if (filter.includes('\u0000')) return 'holds a null character';
	const levels = filter.split('/');
	for (const [i, level] of levels.entries()) {
		if (level.includes('#') && (level !== '#' || i !== levels.length - 1)) return '# stands only alone and in the last level';
		if (level.includes('+') && level !== '+') return '+ stands only alone in its level';
	}
	return null;
}

/** True when the filter may match more than one topic. */
export function hasWildcard(filter: string): boolean {
	return /[+#]/.test(filter);
}

/** True for a JSON Pointer: empty, or tokens each begun by `/` with `~` only as `~0` or `~1` [RFC 6901 §3]. */
export function isJsonPointer(text: string): boolean {
	return text === '' || (text.startsWith('/') && !/~(?![01])/.test(text));
}
