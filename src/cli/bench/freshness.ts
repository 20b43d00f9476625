// Edge: cli. May touch: the OPC UA source, pipeline, store, feed stream, a peer. From the source's change to the value in an open stream.
import { mkdtempSync, rmSync } from 'node:fs';
import { tmpdir } from 'node:os';
import { join } from 'node:path';
import { opcuaSettings } from '#lib/domain/source-settings.ts';
import type { TagPlan } from '#lib/domain/tag-map/tag-plan.ts';
import { createFeedWatch } from '#lib/pipeline/feeds/feed.ts';
import { createFeedStream } from '#lib/pipeline/feeds/stream.ts';
import { Pipeline } from '#lib/pipeline/pipeline.ts';
import { createOpcuaSource } from '#lib/pipeline/sources/opcua/opcua-source.ts';
import { createCopyWriter } from '#lib/pipeline/store/copy-writer.ts';
import { resolveCursor } from '#lib/pipeline/store/find-feed.ts';
import type { Pool } from '#lib/server/db/pool.ts';
import { findFreePort } from '../throwaway-product.ts';
import { benchLine, type BenchLine } from './line.ts';
import { barePlan } from './plan.ts';
import { startPeer } from './peer.ts';

const TAGS = 2_000;
const CHANGE_MS = 1_000;
const PUBLISH_MS = 250;
/** Short beside the publishing interval, so that the server does not add a second wait. */
const SAMPLE_MS = 50;
const ROUNDS = 5;
const ROUND_MS = 6_000;

/** Ours: 99th percentile of the age of values as they reach a reader. Reference: the publishing interval. */
export async function benchFreshness(pool: Pool, siteId: number): Promise<BenchLine> {
	const tags = await pool.query<{ id: number }>(
		"INSERT INTO tags (site_id, name, unit, published_at) SELECT $1, 'FRESH-' || n, 'ms', now() FROM generate_series(1, $2::int) AS n RETURNING id",
		[siteId, TAGS],
	);
	const plans = tags.rows.map(({ id }, n): TagPlan =>
		barePlan(siteId, id, {
			kind: 'opcua',
			nodeId: `nsu=urn:bench:plant;s=V${n}`,
			indexRange: null,
		}),
	);
	const port = await findFreePort();
	const folder = mkdtempSync(join(tmpdir(), 'millrace-bench-'));
	const peer = await startPeer('opcua-peer.ts', [String(port), String(TAGS), String(CHANGE_MS)]);
	const writer = createCopyWriter(pool, { now: Date.now });
	const pipeline = new Pipeline(writer, Date.now);
	for (const plan of plans) pipeline.setTag(plan, { judging: null, latest: null });
	const watch = createFeedWatch(pool);
	const stop = new AbortController();
	const ages: number[] = [];
	try {
		const source = createOpcuaSource(
			opcuaSettings.parse({ endpoint_url: `opc.tcp://127.0.0.1:${port}`, publishing_interval_ms: PUBLISH_MS }),
			{
				observer: { event: () => undefined, exchange: () => undefined, request: () => undefined, clockSkew: () => undefined },
				pkiFolder: join(folder, 'pki'),
				installationId: 'bench',
				now: Date.now,
			},
		);
		const link = await source.open((samples) => pipeline.accept(samples), stop.signal);
		await link.setAddresses(plans.map(({ tagId, address }) => ({ key: tagId, intervalMs: SAMPLE_MS, address })));
		await new Promise((resolve) => setTimeout(resolve, 5_000));
		const from = await resolveCursor(pool, siteId, undefined);
		if (!from.ok) throw new Error(from.reason);
		const stream = createFeedStream(pool, watch, { siteId, from: from.value, signal: stop.signal });
		const reading = read(stream, (value) => ages.push(Date.now() - value));
		const ours: number[] = [];
		for (let round = 0; round < ROUNDS; round += 1) {
			ages.length = 0;
			await new Promise((resolve) => setTimeout(resolve, ROUND_MS));
			if (ages.length < TAGS) throw new Error(`only ${ages.length} values reached the reader`);
			ours.push([...ages].sort((a, b) => a - b)[Math.floor(ages.length * 0.99)] ?? 0);
		}
		stop.abort();
		await link.closed.catch(() => undefined);
		await reading;
		return benchLine(
			'freshness',
			ours,
			[PUBLISH_MS],
			'ms',
			`p99 from the change in the source to the value in an open stream, ${TAGS} tags at ${CHANGE_MS} ms, publishing every ${PUBLISH_MS} ms; goal 300 ms beyond it`,
		);
	} finally {
		stop.abort();
		await peer.stop();
		await pipeline.close();
		await writer.close();
		await watch.close();
		rmSync(folder, { recursive: true, force: true });
	}
}

async function read(stream: ReadableStream<Uint8Array>, onValue: (value: number) => void): Promise<void> {
	let text = '';
	const decoder = new TextDecoder();
	for await (const chunk of stream as unknown as AsyncIterable<Uint8Array>) {
		text += decoder.decode(chunk, { stream: true });
		const events = text.split('\n\n');
		text = events.pop() ?? '';
		for (const event of events) {
			const data = /^data: (.*)$/m.exec(event)?.[1];
			if (!data) continue;
			for (const item of (JSON.parse(data) as { items: { value: number | null }[] }).items)
				if (item.value !== null) onValue(item.value);
		}
	}
}
