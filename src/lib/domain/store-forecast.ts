// Pure.

/** One kind of stored data, as it grows and as retention stops it. */
export interface StoreKind {
	bytes: number;
	bytesPerDay: number;
	/** Days it is kept. */
	keepDays: number;
	/** Days it reaches back now. */
	heldDays: number;
	/** Days until it begins to grow: blocks wait until the rows' days are full. */
	waitDays?: number;
}

export interface StoreForecast {
	/** Bytes more per day over the coming days. */
	growthPerDay: number;
	/** Size of everything when retention takes as much as comes, bytes. */
	steadyBytes: number;
	/** Days until that is so. */
	steadyInDays: number;
	/** Days until the free bytes are used up; null when they last. */
	fullInDays: number | null;
}

/** Bytes that a kind has gained after `days`; it grows while it reaches back less far than it is kept. */
function gained(kind: StoreKind, days: number): number {
	const wait = kind.waitDays ?? 0;
	return kind.bytesPerDay * Math.max(0, Math.min(days - wait, kind.keepDays - kind.heldDays));
}

/** When the store stops growing and whether the free bytes last until then. `restBytes` is what does not grow; `freeBytes` null where it is not known. */
export function forecastStore(kinds: readonly StoreKind[], restBytes: number, freeBytes: number | null): StoreForecast {
	const more = (days: number) => kinds.reduce((sum, kind) => sum + gained(kind, days), 0);
	const ends = kinds
		.filter((kind) => kind.bytesPerDay > 0)
		.map((kind) => (kind.waitDays ?? 0) + Math.max(0, kind.keepDays - kind.heldDays));
	const steadyInDays = Math.max(0, ...ends);
	const now = kinds.reduce((sum, kind) => sum + kind.bytes, restBytes);
	const base = { growthPerDay: more(1), steadyBytes: now + more(steadyInDays), steadyInDays };
	if (freeBytes === null || more(steadyInDays) <= freeBytes) return { ...base, fullInDays: null };
	// It only grows, so halving finds the day.
	let [low, high] = [0, Math.ceil(steadyInDays)];
	while (high - low > 1) {
		const middle = (low + high) >> 1;
		if (more(middle) > freeBytes) high = middle;
		else low = middle;
	}
	return { ...base, fullInDays: high };
}
