import { z } from 'zod';
import { noteReader } from '#lib/pipeline/feeds/reader-lag.ts';
import { entriesToLines, feedLines } from '#lib/pipeline/feeds/feed-lines.ts';
import { toFeedItem } from '#lib/pipeline/feeds/reading-json.ts';
import { formatCursor } from '#lib/pipeline/store/feed-cursor.ts';
import { findBehind, readFeed, readFeedHead, type FeedEntry, type FeedPage } from '#lib/pipeline/store/find-feed.ts';
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

		const form = answerType === CSV_TYPE ? 'csv' : 'ndjson';
		if (answerType !== JSON_TYPE && query.limit === undefined) {
			const head = await readFeedHead(pool, site.id);
			headers.set('x-next-cursor', formatCursor(head));
			note(head.position);
			const stretch = { siteId: site.id, after: place.value.position, last: head.position, tagIds, form } as const;
			return toResponse(toStream(feedLines(pool, stretch)), form);
		}
		const signal = AbortSignal.any([request.signal, shutdownSignal]);
		const page = await waitForEntries(pool, site.id, place.value, {
			limit: query.limit ?? 1_000,
			tagIds,
			waitS: query.wait,
			signal,
		});
		note(page.position);
		const facts = await tagFacts(pool, site.id, tagIdsOf(page.entries));
		if (answerType !== JSON_TYPE) {
			headers.set('x-next-cursor', page.cursor);
			return toResponse(entriesToLines(page.entries, facts, form), form);
		}
		return {
			items: page.entries.map((entry) => toFeedItem(entry, facts)),
			cursor: page.cursor,
			behind: await findBehind(pool, site.id, page.position),
		};
	},
);

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

function toResponse(body: ReadableStream<Uint8Array> | string, form: 'ndjson' | 'csv'): Response {
	return new Response(body, {
		headers: { 'content-type': form === 'csv' ? `${CSV_TYPE}; charset=utf-8; header=present` : NDJSON_TYPE },
	});
}

/** Made as the reader takes it: nothing piles up for one that is slow. */
function toStream(chunks: AsyncGenerator<Uint8Array>): ReadableStream<Uint8Array> {
	return new ReadableStream<Uint8Array>(
		{
			async pull(controller) {
				const next = await chunks.next();
				if (next.done) controller.close();
				else controller.enqueue(next.value);
			},
			async cancel() {
				await chunks.return(undefined);
			},
		},
		{ highWaterMark: 1 },
	);
}
