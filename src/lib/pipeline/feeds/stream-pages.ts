// Edge: feeds. May touch: store finders. Never sources. Events of open streams, made once for all readers that stand at the same place.
import type { Pool } from '#lib/server/db/pool.ts';
import { readFeed } from '#lib/pipeline/store/find-feed.ts';
import { tagFacts } from '#lib/pipeline/store/tag-facts.ts';
import { toFeedItem } from './reading-json.ts';

/** Most readings in one event. */
const PAGE = 1_000;
/** As long as a rename may take to show in a feed; with tag-facts.ts. */
const FRESH_MS = 1_000;
/** Most events kept for others: at 200 bytes a reading some 13 MB. */
const KEPT = 64;

export interface StreamPage {
	/** The place after this page; what a filter hides is behind it. */
	position: number;
	/** A whole server-sent event; null when nothing is there for this reader. */
	event: Uint8Array | null;
}

interface Kept {
	madeAt: number;
	page: Promise<StreamPage>;
}
const kept = new WeakMap<Pool, Map<string, Kept>>();

/** Names a set of tags, so that streams that ask for the same ones share. */
export function filterName(tagIds: ReadonlySet<number> | undefined): string {
	return tagIds ? [...tagIds].sort((a, b) => a - b).join() : '';
}

/**
 * The next event after a place. The journal never changes, so that what one reader was given is right for each that asks from the same place:
 * two hundred streams at the live edge cost one query and one text.
 */
export function readStreamPage(
	pool: Pool,
	request: { siteId: number; from: { position: number; epoch: string }; tagIds: ReadonlySet<number> | undefined; filter: string },
): Promise<StreamPage> {
	const pages = kept.get(pool) ?? new Map<string, Kept>();
	kept.set(pool, pages);
	const key = `${request.siteId}:${request.from.epoch}:${request.from.position}:${request.filter}`;
	const known = pages.get(key);
	const now = performance.now();
	if (known && now - known.madeAt < FRESH_MS) return known.page;
	const made: Kept = { madeAt: now, page: makePage(pool, request) };
	pages.delete(key);
	pages.set(key, made);
	for (const [oldest, one] of pages) {
		if (pages.size <= KEPT && now - one.madeAt < FRESH_MS) break;
		pages.delete(oldest);
	}
	const forget = () => {
		if (pages.get(key) === made) pages.delete(key);
	};
	// Nothing there now may be something in a moment; a failure is not to be shared with the next try.
	made.page.then((page) => page.event === null && forget(), forget);
	return made.page;
}

async function makePage(
	pool: Pool,
	{
		siteId,
		from,
		tagIds,
	}: { siteId: number; from: { position: number; epoch: string }; tagIds: ReadonlySet<number> | undefined },
): Promise<StreamPage> {
	const page = await readFeed(pool, siteId, from, { limit: PAGE, tagIds });
	if (page.entries.length === 0) return { position: page.position, event: null };
	const facts = await tagFacts(
		pool,
		siteId,
		page.entries.flatMap((entry) => (entry.kind === 'reading' ? [entry.tagId] : [])),
	);
	const items = page.entries.map((entry) => toFeedItem(entry, facts));
	return {
		position: page.position,
		event: new TextEncoder().encode(`id: ${page.cursor}\nevent: readings\ndata: ${JSON.stringify({ items })}\n\n`),
	};
}
