// Edge: feeds. May touch: store finders. Never sources. A stretch of the feed as text, straight from the journal's columns.
import type { Pool } from '#lib/server/db/pool.ts';
import { readJournal, type FeedEntry } from '#lib/pipeline/store/find-feed.ts';
import { listPackedTags, visitPacked } from '#lib/pipeline/store/journal-codec.ts';
import { tagFacts, type TagFacts } from '#lib/pipeline/store/tag-facts.ts';
import { createFeedLines, FEED_CSV_HEADER, feedCsvLine } from './reading-json.ts';

/** Positions looked at in one query; its lines are one chunk of the answer. */
const WINDOW = 20_000;

export interface Stretch {
	siteId: number;
	/** Lines after this position … */
	after: number;
	/** … up to this one, included: what is stored meanwhile belongs to the next request. */
	last: number;
	tagIds?: ReadonlySet<number> | undefined;
	form: 'ndjson' | 'csv';
}

/** Chunks of whole lines. No object is made a reading, and nothing of the answer is held but the chunk. */
export async function* feedLines(pool: Pool, stretch: Stretch): AsyncGenerator<Uint8Array> {
	const { siteId, last, tagIds } = stretch;
	let position = stretch.after;
	if (stretch.form === 'csv') yield Buffer.from(FEED_CSV_HEADER);
	// The next window is on its way while this one is written.
	let coming = position < last ? readJournal(pool, siteId, position, Math.min(last, position + WINDOW)) : null;
	while (coming) {
		const rows = await coming;
		const end = rows.at(-1)?.last_position ?? last;
		coming = rows.length > 0 && end < last ? readJournal(pool, siteId, end, Math.min(last, end + WINDOW)) : null;
		// A reader that leaves while the next window is awaited must not leave an unheard failure behind.
		coming?.catch(() => undefined);
		const needs = new Set<number>();
		for (const row of rows) if (row.readings) for (const id of listPackedTags(row.readings)) needs.add(id);
		const facts = await tagFacts(pool, siteId, needs);
		const lines = createFeedLines(facts);
		const parts: string[] = [];
		for (const row of rows) {
			if (row.event) {
				const { event } = row;
				if (row.last_position > last || (tagIds && event.tagId !== undefined && !tagIds.has(event.tagId))) continue;
				parts.push(stretch.form === 'csv' ? feedCsvLine({ kind: 'event', event }, facts) : lines.event(event));
			} else if (row.readings) {
				const first = row.first_position;
				visitPacked(row.readings, Math.max(0, position - first + 1), (tagId, at, value, quality, flags, index) => {
					if (first + index > last) return true;
					if (!tagIds || tagIds.has(tagId))
						parts.push(
							stretch.form === 'csv'
								? feedCsvLine({ kind: 'reading', tagId, at, value, quality, ...flags }, facts)
								: lines.reading(tagId, at, value, quality, flags),
						);
					return false;
				});
			}
			position = row.last_position;
		}
		if (parts.length > 0) yield Buffer.from(parts.join(''));
	}
}

/** Entries of one page as text. */
export function entriesToLines(
	entries: readonly FeedEntry[],
	facts: ReadonlyMap<number, TagFacts>,
	form: 'ndjson' | 'csv',
): string {
	if (form === 'csv') return FEED_CSV_HEADER + entries.map((entry) => feedCsvLine(entry, facts)).join('');
	const lines = createFeedLines(facts);
	return entries
		.map((entry) =>
			entry.kind === 'event' ? lines.event(entry.event) : lines.reading(entry.tagId, entry.at, entry.value, entry.quality, entry),
		)
		.join('');
}
