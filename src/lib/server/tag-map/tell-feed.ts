// Edge: tag map. May touch: the store's feed journal, in the caller's transaction.
import type { MapDiff } from '#lib/domain/tag-map/diff.ts';
import { appendFeedEvents } from '#lib/pipeline/store/feed-journal.ts';
import type { FeedEvent } from '#lib/pipeline/store/write-batch.ts';
import type { Client } from '#lib/server/db/pool.ts';

/** Tells receivers of the feed what a new revision means for them: tags renamed, retired, or in another unit from here on. Call it last in the transaction. */
export async function tellFeed(client: Client, siteId: number, diff: MapDiff): Promise<void> {
	const at = Date.now();
	const events: FeedEvent[] = [];
	for (const { id, before, after } of diff.changed) {
		if (before.tag !== after.tag) events.push({ siteId, event: 'tag-renamed', at, tagId: id, tag: after.tag, from: before.tag });
		const unit = (row: typeof before) => ({ unit: row.unit ?? '1', detector: row.detector ?? 'none' });
		const [old, fresh] = [unit(before), unit(after)];
		if (old.unit !== fresh.unit || old.detector !== fresh.detector) {
			events.push({ siteId, event: 'tag-unit-changed', at, tagId: id, tag: after.tag, from: old, to: fresh });
		}
	}
	for (const row of diff.removed) events.push({ siteId, event: 'tag-retired', at, tagId: row.id, tag: row.tag });
	await appendFeedEvents(client, siteId, events, at);
}
