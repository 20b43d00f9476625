/** The process lives; asks nothing of anything else. */
export const GET = (): Response =>
	new Response(JSON.stringify({ status: 'alive' }), {
		headers: { 'content-type': 'application/json', 'cache-control': 'no-store' },
	});
