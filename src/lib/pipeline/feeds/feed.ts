// Edge: feeds. May touch: pool for LISTEN, store finders. Never sources.
import type { Client, Pool } from '#lib/server/db/pool.ts';
import { log } from '#lib/server/log.ts';

/** One look a second for all readers of the process: a bell may be lost, a look is not. */
const LOOK_MS = 1_000;
const RETRY_MS = 1_000;

type Wake = (position: number) => void;

/** Wakes readers of a site's feed. One LISTEN client a process, however many readers. */
export interface FeedWatch {
	/** Resolves when the site's feed may have gone past `position`, or after `waitMs`, or when the signal aborts. */
	waitPast(siteId: number, position: number, waitMs: number, signal?: AbortSignal): Promise<void>;
	close(): Promise<void>;
}

/** Begins to listen; a lost connection is made again, and readers go on looking meanwhile. */
export function createFeedWatch(pool: Pool): FeedWatch {
	const sleepers = new Map<number, Set<Wake>>();
	let client: Client | null = null;
	/** The place last heard of, a site. Only believed for a moment: a restore sets positions back. */
	const heard = new Map<number, { position: number; at: number }>();
	let isClosed = false;
	let timer: NodeJS.Timeout | undefined;

	const wakeAll = (siteId: number, position: number) => {
		heard.set(siteId, { position, at: performance.now() });
		for (const wake of [...(sleepers.get(siteId) ?? [])]) wake(position);
	};
	let isLooking = false;
	const look = async () => {
		const sites = [...sleepers].filter(([, wakes]) => wakes.size > 0).map(([siteId]) => siteId);
		if (isLooking || sites.length === 0) return;
		isLooking = true;
		try {
			const heads = await pool.query<{ site_id: number; position: number }>(
				'SELECT site_id, position FROM feed_heads WHERE site_id = ANY($1)',
				[sites],
			);
			for (const head of heads.rows) wakeAll(head.site_id, head.position);
		} catch (error) {
			log.debug({ error: (error as Error).message }, 'looking for the feed failed');
		} finally {
			isLooking = false;
		}
	};
	const looking = setInterval(() => void look(), LOOK_MS);
	const listen = async () => {
		if (isClosed) return;
		try {
			const made = await pool.connect();
			if (isClosed) {
				made.release();
				return;
			}
			client = made;
			made.on('notification', ({ payload }) => {
				const [site, position] = (payload ?? '').split(':').map(Number);
				if (site !== undefined && position !== undefined) wakeAll(site, position);
			});
			const again = () => {
				if (client !== made) return;
				client = null;
				made.release(true);
				if (!isClosed) timer = setTimeout(() => void listen(), RETRY_MS);
			};
			made.once('error', again);
			made.once('end', again);
			await made.query('LISTEN millrace_feed');
		} catch (error) {
			log.debug({ error: (error as Error).message }, 'listening for the feed failed');
			client?.release(true);
			client = null;
			if (!isClosed) timer = setTimeout(() => void listen(), RETRY_MS);
		}
	};
	void listen();

	return {
		waitPast(siteId, position, waitMs, signal) {
			return new Promise((resolve) => {
				const set = sleepers.get(siteId) ?? new Set<Wake>();
				sleepers.set(siteId, set);
				const done = () => {
					clearTimeout(limit);
					set.delete(wake);
					signal?.removeEventListener('abort', done);
					resolve();
				};
				const wake: Wake = (place) => {
					if (place > position) done();
				};
				const limit = setTimeout(done, waitMs);
				set.add(wake);
				const last = heard.get(siteId);
				// A bell that rang between the reader's look and now is not lost.
				const isBehind = last !== undefined && last.position > position && performance.now() - last.at < LOOK_MS;
				if (signal?.aborted || isBehind) done();
				else signal?.addEventListener('abort', done);
			});
		},
		async close() {
			isClosed = true;
			clearTimeout(timer);
			clearInterval(looking);
			for (const set of sleepers.values()) for (const wake of [...set]) wake(Infinity);
			const open = client;
			client = null;
			open?.release(true);
		},
	};
}
