// Pure.

/** FNV-1a over the text, finished by a mix so that near keys give far numbers; 32 bits. */
export function hash(text: string): number {
	let state = 0x811c9dc5;
	for (let at = 0; at < text.length; at++) {
		state ^= text.charCodeAt(at);
		state = Math.imul(state, 0x01000193);
	}
	state ^= state >>> 16;
	state = Math.imul(state, 0x85ebca6b);
	state ^= state >>> 13;
	state = Math.imul(state, 0xc2b2ae35);
	return (state ^ (state >>> 16)) >>> 0;
}

/** Even number in [0, 1) that belongs to these parts for ever. */
export function even(...parts: readonly (string | number)[]): number {
	return hash(parts.join('|')) / 0x1_0000_0000;
}

/** Number around 0 with a spread of about 1 (four even numbers added), never beyond 3.5. */
export function bell(...parts: readonly (string | number)[]): number {
	const key = parts.join('|');
	let sum = 0;
	for (let draw = 0; draw < 4; draw++) sum += even(key, draw);
	return (sum - 2) * Math.sqrt(3);
}
