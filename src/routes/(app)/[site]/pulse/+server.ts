import { requireSite } from '#lib/server/identity/require.ts';
import { followPulse } from '#lib/server/pulse/pulse-hub.ts';
import type { RequestHandler } from './$types';

/** Server-sent events `pulse`, one a second, until the page goes away. */
export const GET: RequestHandler = async ({ locals, params }) => {
	const { site } = await requireSite(locals, params.site, 'site:read');
	const encoder = new TextEncoder();
	let stop = () => {};
	const body = new ReadableStream<Uint8Array>({
		start(controller) {
			controller.enqueue(encoder.encode('retry: 2000\n\n'));
			stop = followPulse(
				site.id,
				(beat) => {
					// A page that does not read falls behind by beats, not by memory.
					if ((controller.desiredSize ?? 1) < -20) return;
					controller.enqueue(encoder.encode(`event: pulse\ndata: ${JSON.stringify(beat)}\n\n`));
				},
				() => controller.close(),
			);
		},
		cancel() {
			stop();
		},
	});
	return new Response(body, {
		headers: { 'content-type': 'text/event-stream', 'cache-control': 'no-store', 'x-accel-buffering': 'no' },
	});
};
