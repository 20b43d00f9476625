// Edge: source setup. May touch: lease and request tables, NOTIFY.
import type { Pool } from '#lib/server/db/pool.ts';

const ANSWER_MS = 12_000;
const LOOK_MS = 60;

/**
 * Asks the collector that runs a source to do something over the source's own connection, since a device may allow only one.
 * `isRunning` is false when no collector holds the source; then nothing was asked.
 */
export async function askCollector(
	pool: Pool,
	sourceId: string,
	kind: 'test' | 'browse' | 'read' | 'reconnect',
	params: Record<string, unknown>,
): Promise<{ isRunning: false } | { isRunning: true; answer: Record<string, unknown> }> {
	const lease = await pool.query(
		'SELECT 1 FROM source_leases l JOIN sources s ON s.id = l.source_id WHERE source_id = $1 AND owner IS NOT NULL AND until > clock_timestamp() AND s.enabled',
		[sourceId],
	);
	if (lease.rowCount === 0) return { isRunning: false };
	const asked = await pool.query<{ id: string }>(
		'INSERT INTO source_requests (source_id, kind, params) VALUES ($1, $2, $3) RETURNING id',
		[sourceId, kind, JSON.stringify(params)],
	);
	const id = asked.rows[0]?.id;
	await pool.query("SELECT pg_notify('millrace_requests', $1)", [sourceId]);
	const deadline = performance.now() + ANSWER_MS;
	while (performance.now() < deadline) {
		await new Promise((resolve) => setTimeout(resolve, LOOK_MS));
		const found = await pool.query<{ answer: Record<string, unknown> | null }>(
			'SELECT answer FROM source_requests WHERE id = $1 AND answered_at IS NOT NULL',
			[id],
		);
		if (found.rows[0]) return { isRunning: true, answer: found.rows[0].answer ?? {} };
	}
	return { isRunning: true, answer: { error: 'The collector did not answer within 12 s.' } };
}
