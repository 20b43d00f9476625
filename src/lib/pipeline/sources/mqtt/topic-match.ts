// Pure.

/**
 * Whether a topic filter matches a topic name: `+` one level, `#` the rest and the level above it,
 * and neither as first level a topic that begins with `$` [MQTT-4.7.1-2, MQTT-4.7.1-3, MQTT-4.7.2-1].
 */
export function topicMatches(filter: string, topic: string): boolean {
	if (filter === topic) return true;
	const wanted = filter.split('/');
	const levels = topic.split('/');
	if (topic.startsWith('$') && (wanted[0] === '+' || wanted[0] === '#')) return false;
	for (const [index, level] of wanted.entries()) {
		if (level === '#') return true;
		if (index >= levels.length) return false;
		if (level !== '+' && level !== levels[index]) return false;
	}
	return wanted.length === levels.length;
}
