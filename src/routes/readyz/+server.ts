import { webPool } from '#lib/server/db/database.ts';
import { readReadiness } from '#lib/server/metrics/read-readiness.ts';

/** 200 when everything that a reading needs is there, else 503; either way with each check by name. */
export const GET = async (): Promise<Response> => {
	const readiness = await readReadiness(webPool());
	return new Response(JSON.stringify(readiness), {
		status: readiness.status === 'ready' ? 200 : 503,
		headers: { 'content-type': 'application/json', 'cache-control': 'no-store' },
	});
};
