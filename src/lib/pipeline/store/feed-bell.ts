// Edge: store. May touch: pool, NOTIFY.
import type { Pool } from '#lib/server/db/pool.ts';
import { log } from '#lib/server/log.ts';

/** At most 20 bells a second: NOTIFY takes a lock of the whole cluster at commit, so there is never one a reading. */
const SPACING_MS = 50;

export interface FeedBell {
	/** Tells readers that a site's feed has come so far; soon, and only the last of several. */
	ring(siteId: number, position: number): void;
	close(): Promise<void>;
}

/** Rings after commits, coalesced. A bell that is lost costs nothing but a second: readers also look by themselves. */
export function createFeedBell(pool: Pool): FeedBell {
	const waiting = new Map<number, number>();
	let timer: NodeJS.Timeout | null = null;
	let lastAt = 0;
	let sending: Promise<void> = Promise.resolve();
	const send = () => {
		timer = null;
		lastAt = performance.now();
		const payloads = [...waiting].map(([siteId, position]) => `${siteId}:${position}`);
		waiting.clear();
		if (payloads.length === 0) return;
		sending = pool.query("SELECT pg_notify('millrace_feed', payload) FROM unnest($1::text[]) AS payload", [payloads]).then(
			() => undefined,
			(error: Error) => log.debug({ error: error.message }, 'a feed bell was not rung'),
		);
	};
	return {
		ring(siteId, position) {
			waiting.set(siteId, position);
			timer ??= setTimeout(send, Math.max(0, SPACING_MS - (performance.now() - lastAt)));
		},
		async close() {
			if (timer) clearTimeout(timer);
			send();
			await sending;
		},
	};
}
