import type { RequestHandler } from '@sveltejs/kit';
import { webPool } from '#lib/server/db/database.ts';
import { Problem } from '#lib/server/http/problem.ts';
import { readPlantMetrics } from '#lib/server/metrics/read-plant-metrics.ts';
import { registry } from '#lib/server/metrics/registry.ts';

/** `metrics` is a right of the installation's figures, not of a site's. */
function isAllowed(locals: App.Locals, request: Request): boolean {
	const { actor, ip } = locals;
	if (actor) return actor.kind === 'key' ? actor.scopes.includes('metrics') : actor.isAdmin;
	if (request.headers.has('authorization')) return false;
	// Behind a proxy everybody seems to come from loopback.
	const isForwarded = request.headers.has('x-forwarded-for') || request.headers.has('forwarded');
	return !isForwarded && /^(127\.\d+\.\d+\.\d+|::1|::ffff:127\.\d+\.\d+\.\d+)$/.test(ip);
}

/** OpenMetrics of this process and of what the database knows. */
export const GET: RequestHandler = async ({ locals, request }) => {
	if (!isAllowed(locals, request)) {
		if (locals.actor) return new Problem(403, 'not-allowed', 'This needs a key with the scope metrics.').toResponse();
		return new Problem(401, 'not-signed-in', 'This needs a key with the scope metrics.', {
			headers: { 'www-authenticate': 'Bearer realm="millrace"' },
		}).toResponse();
	}
	const plant = await readPlantMetrics(webPool());
	// One exposition, so one end mark [OpenMetrics 1.0 §4.1].
	const own = (await registry.metrics()).replace(/# EOF\n?$/, '');
	return new Response(own + (await plant.metrics()), {
		headers: { 'content-type': registry.contentType, 'cache-control': 'no-store' },
	});
};
