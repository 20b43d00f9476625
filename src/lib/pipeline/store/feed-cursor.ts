// Pure.
/** A place in a site's feed: the store's epoch and the position after which reading goes on. */
export interface FeedCursor {
	epoch: string;
	position: number;
}

/** The cursor as text in `[A-Za-z0-9._-]`: the epoch's first eight digits, a point, the position. */
export function formatCursor(cursor: FeedCursor): string {
	return `${shortEpoch(cursor.epoch)}.${cursor.position}`;
}

/** The part of the epoch that a cursor carries. */
export function shortEpoch(epoch: string): string {
	return epoch.replaceAll('-', '').slice(0, 8);
}

/** Reads a cursor; `0` is the oldest that is kept. Null for what is none. */
export function parseCursor(text: string): { epoch: string | null; position: number } | null {
	if (text === '0') return { epoch: null, position: 0 };
	const match = /^([0-9a-f]{8})\.(\d{1,15})$/.exec(text);
	return match ? { epoch: match[1] ?? '', position: Number(match[2]) } : null;
}
