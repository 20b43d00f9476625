import { z } from 'zod';
import { noteReader } from '#lib/pipeline/feeds/reader-lag.ts';
import { createFeedLines, FEED_CSV_HEADER, feedCsvLine, toFeedItem } from '#lib/pipeline/feeds/reading-json.ts';
import { formatCursor } from '#lib/pipeline/store/feed-cursor.ts';
import { readFeed, readFeedHead, type FeedEntry, type FeedPage } from '#lib/pipeline/store/find-feed.ts';
import { tagFacts } from '#lib/pipeline/store/tag-facts.ts';
import { feedItem } from '#lib/server/feed/answer-schema.ts';
import { resolvePlace, resolveTags, type Place } from '#lib/server/feed/resolve-place.ts';
import { webFeedWatch } from '#lib/server/feed/web-feed-watch.ts';
import { api } from '#lib/server/http/api.ts';
import { CSV_TYPE, JSON_TYPE, NDJSON_TYPE } from '#lib/server/http/negotiate.ts';
import { intParam, namesParam } from '#lib/server/http/parameters.ts';
import { Problem } from '#lib/server/http/problem.ts';
import type { Pool } from '#lib/server/db/pool.ts';
import { shutdownSignal } from '#lib/server/shutdown.ts';

/** Entries fetched at a time while a whole stretch streams. */
const STREAM_PAGE = 10_000;

const tagIdsOf = (entries: readonly FeedEntry[]) => entries.flatMap((entry) => (entry.kind === 'reading' ? [entry.tagId] : []));

export const GET = api(
	{
		summary:
			'What was stored, in one order that never skips: without `after` from now on, `after=0` from the oldest kept. CSV and NDJSON without `limit` hold all up to now; the cursor after them is in X-Next-Cursor.',
		permission: 'site:read',
		query: z.strictObject({
			after: z.string().max(100).optional(),
			limit: intParam(1, 10_000).optional(),
			wait: intParam(0, 60).default(0),
			tags: namesParam.optional(),
		}),
		answer: z.object({
			items: z.array(feedItem),
			cursor: z.string(),
			behind: z.object({ seconds: z.number(), readings: z.number().int() }),
		}),
		answerTypes: [CSV_TYPE, NDJSON_TYPE],
		refusals: [410],
	},
	async ({ pool, site, query, request, answerType, headers, actor }) => {
		const place = await resolvePlace(pool, site.id, query.after);
		if (!place.ok) throw new Problem(410, 'cursor-gone', `${place.detail ?? 'This place is no longer kept'}.`);
		const tagIds = await resolveTags(pool, site.id, query.tags);
		// Receivers read by key; a person looking is none.
		const note = (position: number) => {
			if (actor.kind === 'key') noteReader(pool, { id: actor.id, name: actor.name, siteId: site.id, position });
		};

		if (answerType !== JSON_TYPE && query.limit === undefined) {
			const head = await readFeedHead(pool, site.id);
			headers.set('x-next-cursor', formatCursor(head));
			note(head.position);
			const pages = pagesUpTo(pool, site.id, place.value, head.position, tagIds);
			return lineStream(pool, site.id, pages, answerType === CSV_TYPE);
		}
		const signal = AbortSignal.any([request.signal, shutdownSignal]);
		const page = await waitForEntries(pool, site.id, place.value, {
			limit: query.limit ?? 1_000,
			tagIds,
			waitS: query.wait,
			signal,
		});
		note(page.position);
		if (answerType !== JSON_TYPE) {
			headers.set('x-next-cursor', page.cursor);
			return lineStream(pool, site.id, one(page.entries), answerType === CSV_TYPE);
		}
		const facts = await tagFacts(pool, site.id, tagIdsOf(page.entries));
		return { items: page.entries.map((entry) => toFeedItem(entry, facts)), cursor: page.cursor, behind: page.behind };
	},
);

async function* one(entries: FeedEntry[]): AsyncGenerator<FeedEntry[]> {
	yield entries;
}

/** Reads, and where there is nothing looks again whenever the feed moves, until the time is over. What a filter hides moves the place on. */
async function waitForEntries(
	pool: Pool,
	siteId: number,
	from: Place,
	options: { limit: number; tagIds: ReadonlySet<number> | undefined; waitS: number; signal: AbortSignal },
): Promise<FeedPage> {
	const until = performance.now() + options.waitS * 1_000;
	let place = from;
	for (;;) {
		const page = await readFeed(pool, siteId, place, options);
		const left = until - performance.now();
		if (page.entries.length > 0 || left <= 0 || options.signal.aborted) return page;
		place = { ...place, position: page.position };
		await webFeedWatch().waitPast(siteId, place.position, left, options.signal);
	}
}

/** Pages up to and including a position: what is stored meanwhile belongs to the next request. */
async function* pagesUpTo(
	pool: Pool,
	siteId: number,
	from: Place,
	last: number,
	tagIds: ReadonlySet<number> | undefined,
): AsyncGenerator<FeedEntry[]> {
	let place = from;
	while (place.position < last) {
		const page = await readFeed(pool, siteId, place, { limit: STREAM_PAGE, tagIds });
		yield page.position <= last ? page.entries : page.entries.filter((entry) => entry.position <= last);
		if (page.position <= place.position) return;
		place = { ...place, position: page.position };
	}
}

function lineStream(pool: Pool, siteId: number, pages: AsyncGenerator<FeedEntry[]>, isCsv: boolean): Response {
	const encoder = new TextEncoder();
	let isFirst = true;
	const body = new ReadableStream<Uint8Array>(
		{
			async pull(controller) {
				let text = isFirst && isCsv ? FEED_CSV_HEADER : '';
				isFirst = false;
				let next = await pages.next();
				while (!next.done && next.value.length === 0) next = await pages.next();
				if (!next.done) {
					const facts = await tagFacts(pool, siteId, tagIdsOf(next.value));
					const lineOf = isCsv ? (entry: FeedEntry) => feedCsvLine(entry, facts) : createFeedLines(facts);
					// Joining beats adding up: the text is flat and encodes in one go.
					text += next.value.map(lineOf).join('');
				}
				if (text !== '') controller.enqueue(encoder.encode(text));
				if (next.done) controller.close();
			},
			async cancel() {
				await pages.return(undefined);
			},
		},
		{ highWaterMark: 1 },
	);
	return new Response(body, { headers: { 'content-type': isCsv ? `${CSV_TYPE}; charset=utf-8; header=present` : NDJSON_TYPE } });
}
