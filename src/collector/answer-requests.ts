// Edge: collector. Tests, looks and reads that the pages ask of a running source, over its own connection. May touch: the requests table.
import type { Pool } from '#lib/server/db/pool.ts';
import type { TagPlan } from '#lib/domain/tag-map/tag-plan.ts';
import { toDryReading } from '#lib/pipeline/normalize/dry-reading.ts';
import type { SourceRun } from './source-run.ts';

const LIMIT_MS = 9_000;
/** A dry run waits this long for its values. */
const READ_MS = 4_000;
const underway = new Set<string>();

/** Answers what is asked of sources that run here; each answer is told by NOTIFY. Long ones do not hold up the next look. */
export async function answerRequests(pool: Pool, runs: ReadonlyMap<string, SourceRun>): Promise<void> {
	if (runs.size === 0) return;
	const open = await pool.query<{ id: string; source_id: string; kind: string; params: Record<string, unknown> }>(
		"SELECT id, source_id, kind, params FROM source_requests WHERE answered_at IS NULL AND source_id = ANY($1::uuid[]) AND requested_at > now() - interval '1 minute'",
		[[...runs.keys()]],
	);
	for (const request of open.rows) {
		const run = runs.get(request.source_id);
		if (!run || underway.has(request.id)) continue;
		underway.add(request.id);
		void answer(run, request)
			.catch((error: Error) => ({ error: error.message }))
			.then((found) =>
				pool.query('UPDATE source_requests SET answered_at = now(), answer = $2 WHERE id = $1', [
					request.id,
					JSON.stringify(found, plain),
				]),
			)
			.then(() => pool.query("SELECT pg_notify('millrace_answers', $1)", [request.id]))
			.catch(() => undefined)
			.finally(() => underway.delete(request.id));
	}
}

function plain(_: string, value: unknown): unknown {
	if (typeof value === 'bigint') return value.toString();
	return value instanceof Uint8Array ? Buffer.from(value).toString('base64') : value;
}

async function answer(run: SourceRun, request: { kind: string; params: Record<string, unknown> }): Promise<unknown> {
	const signal = AbortSignal.timeout(LIMIT_MS);
	switch (request.kind) {
		case 'test':
			if (run.link?.test) return { report: await run.link.test(signal) };
			return {
				report: {
					ok: run.link !== null,
					steps: [
						{ name: 'Connection', ok: run.link !== null, detail: run.link ? 'stands' : (run.advice?.text ?? 'not made yet') },
					],
					advice: run.advice,
				},
			};
		case 'browse':
			if (!run.link?.browse)
				return { error: run.link ? 'this kind of source cannot be looked through' : (run.advice?.text ?? 'not connected') };
			return { items: await run.link.browse((request.params.node as string | null) ?? null, signal) };
		case 'read': {
			if (!run.link) return { error: run.advice?.text ?? 'not connected' };
			const plans = request.params.plans as TagPlan[];
			const samples = await run.readOnce(
				plans.map((plan) => ({ key: plan.tagId, address: plan.address, intervalMs: plan.intervalMs })),
				READ_MS,
			);
			return { items: plans.map((plan) => toDryReading(plan, samples.get(plan.tagId), Date.now())) };
		}
		case 'reconnect':
			run.reconnect();
			return { done: true };
		default:
			return { error: `nothing is known of ${request.kind}` };
	}
}
