// Edge: feed. May touch: the web pool, the feed's watch, shutdown.
import { createFeedWatch, type FeedWatch } from '#lib/pipeline/feeds/feed.ts';
import { webPool } from '#lib/server/db/database.ts';
import { onShutdown } from '#lib/server/shutdown.ts';

let watch: FeedWatch | undefined;

/** The web process's one watch over the feed, begun on first use. */
export function webFeedWatch(): FeedWatch {
	if (!watch) {
		const made = createFeedWatch(webPool());
		watch = made;
		onShutdown(async () => {
			watch = undefined;
			await made.close();
		});
	}
	return watch;
}
