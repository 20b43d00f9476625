// Edge: feeds. May touch: store finders, the feed's watch. Never sources.
import type { Pool } from '#lib/server/db/pool.ts';
import { log } from '#lib/server/log.ts';
import type { FeedWatch } from './feed.ts';
import { filterName, readStreamPage } from './stream-pages.ts';

/** A comment this often keeps proxies from closing an idle stream. */
const COMMENT_MS = 15_000;

export interface StreamRequest {
	siteId: number;
	from: { position: number; epoch: string };
	tagIds?: ReadonlySet<number> | undefined;
	signal: AbortSignal;
	/** Called after each event that was handed on, with the position after it. */
	onDelivered?(position: number): void;
}

/** Answers a server-sent event `gone` and the end: the cursor is too old, or of another epoch. */
export function goneStream(detail: string): ReadableStream<Uint8Array> {
	const encoder = new TextEncoder();
	return new ReadableStream({
		start(controller) {
			controller.enqueue(encoder.encode(`event: gone\ndata: ${JSON.stringify({ detail })}\n\n`));
			controller.close();
		},
	});
}

/**
 * The feed as server-sent events: `readings` with `{items}`, `id` the cursor after them. A reader that is slow is read on its own pull: nothing piles up here.
 * Ends when the reader leaves or the signal aborts.
 */
export function createFeedStream(pool: Pool, watch: FeedWatch, request: StreamRequest): ReadableStream<Uint8Array> {
	const encoder = new TextEncoder();
	const stop = new AbortController();
	const abort = () => stop.abort();
	request.signal.addEventListener('abort', abort, { once: true });
	let at = request.from;
	let spokeAt = performance.now();
	let isFirst = true;
	const filter = filterName(request.tagIds);

	return new ReadableStream<Uint8Array>(
		{
			async pull(controller) {
				if (isFirst) {
					isFirst = false;
					// Tells the reader at once that it is connected, and how long to wait before it tries again.
					controller.enqueue(encoder.encode(`retry: ${1_000 + Math.floor(Math.random() * 2_000)}\n: open\n\n`));
					return;
				}
				while (!stop.signal.aborted) {
					try {
						const page = await readStreamPage(pool, { siteId: request.siteId, from: at, tagIds: request.tagIds, filter });
						if (stop.signal.aborted) break;
						at = { ...at, position: page.position };
						if (page.event) {
							controller.enqueue(page.event);
							spokeAt = performance.now();
							request.onDelivered?.(page.position);
							return;
						}
					} catch (error) {
						// The database is away: the reader keeps its stream and its place.
						log.debug({ error: (error as Error).message }, 'a stream could not read the feed');
					}
					const quiet = performance.now() - spokeAt;
					if (quiet >= COMMENT_MS) {
						controller.enqueue(encoder.encode(': here\n\n'));
						spokeAt = performance.now();
						return;
					}
					await watch.waitPast(request.siteId, at.position, COMMENT_MS - quiet, stop.signal);
				}
				request.signal.removeEventListener('abort', abort);
				try {
					controller.close();
				} catch {
					// The reader closed it first.
				}
			},
			cancel() {
				stop.abort();
				request.signal.removeEventListener('abort', abort);
			},
		},
		{ highWaterMark: 1 },
	);
}
