import { z } from 'zod';
import { noteReader } from '#lib/pipeline/feeds/reader-lag.ts';
import { createFeedStream, goneStream } from '#lib/pipeline/feeds/stream.ts';
import { resolvePlace, resolveTags } from '#lib/server/feed/resolve-place.ts';
import { webFeedWatch } from '#lib/server/feed/web-feed-watch.ts';
import { api } from '#lib/server/http/api.ts';
import { namesParam } from '#lib/server/http/parameters.ts';
import { shutdownSignal } from '#lib/server/shutdown.ts';

export const GET = api(
	{
		summary:
			'The feed as server-sent events `readings`; `Last-Event-ID` wins over `after`. A cursor too old: event `gone`, then the end.',
		permission: 'site:read',
		query: z.strictObject({ after: z.string().max(100).optional(), tags: namesParam.optional() }),
		answerTypes: ['text/event-stream'],
	},
	async ({ pool, site, query, request, actor }) => {
		const lastSeen = request.headers.get('last-event-id');
		const place = await resolvePlace(pool, site.id, lastSeen === null || lastSeen === '' ? query.after : lastSeen);
		const tagIds = await resolveTags(pool, site.id, query.tags);
		const body = place.ok
			? createFeedStream(pool, webFeedWatch(), {
					siteId: site.id,
					from: place.value,
					tagIds,
					signal: AbortSignal.any([request.signal, shutdownSignal]),
					// Receivers read by key; a person's open page is none.
					onDelivered: (position) => {
						if (actor.kind === 'key') noteReader(pool, { id: actor.id, name: actor.name, siteId: site.id, position });
					},
				})
			: goneStream(place.detail ?? 'this place is no longer kept');
		return new Response(body, {
			headers: {
				'content-type': 'text/event-stream',
				'cache-control': 'no-store',
				// Proxies that gather answers would hold events back.
				'x-accel-buffering': 'no',
			},
		});
	},
);
