// Edge: cli. May touch: the store, PostgreSQL clusters of its own. `npm run bench`: speed as a ratio against a bare reference in the same run.
import { ensurePartitionsAhead } from '#lib/pipeline/store/partitions.ts';
import { createPool, type Pool } from '#lib/server/db/pool.ts';
import { migrateDatabase } from '#lib/server/db/migrate.ts';
import { createBenchCluster } from './bench-cluster.ts';
import { benchFeed } from './bench/feed.ts';
import { benchFreshness } from './bench/freshness.ts';
import { benchIngest, benchIngestGrowth } from './bench/ingest.ts';
import type { BenchLine } from './bench/line.ts';
import { benchModbus } from './bench/modbus.ts';
import { benchMqtt } from './bench/mqtt.ts';
import { benchOpcua } from './bench/opcua.ts';
import { benchPacking } from './bench/packing.ts';
import { benchPages } from './bench/pages.ts';
import { benchTrendGrowth } from './bench/trend-growth.ts';
import { Refusal } from './bootstrap.js';

const TAGS = 500;

const asked = process.argv.slice(2);
const KNOWN = ['ingest', 'feed', 'trend-growth', 'ingest-growth', 'packing', 'modbus', 'opcua', 'mqtt', 'freshness', 'pages'];
for (const name of asked)
	if (!KNOWN.includes(name)) throw new Refusal(`No benchmark is named "${name}". Known: ${KNOWN.join(', ')}.`);

const wants = (name: string) => asked.length === 0 || asked.includes(name);
const print = (line: BenchLine) => console.log(JSON.stringify(line));

if (['ingest', 'feed', 'trend-growth', 'packing', 'mqtt', 'freshness'].some(wants)) await storeBenches();
if (wants('ingest-growth')) await growthBench();
if (wants('modbus')) print(await benchModbus());
if (wants('opcua')) print(await benchOpcua());
if (wants('pages')) (await benchPages()).forEach(print);

interface Store {
	pool: Pool;
	url: string;
	siteId: number;
	tagIds: number[];
	remove(): Promise<void>;
}

/** A cluster of its own with a site of 500 tags. */
async function layStore(): Promise<Store> {
	const cluster = await createBenchCluster();
	await migrateDatabase(cluster.url, 'drizzle');
	const pool = createPool(cluster.url, { name: 'millrace-bench', max: 6, statementTimeoutMs: 0 });
	await ensurePartitionsAhead(pool, Date.now());
	const site = await pool.query<{ id: number }>("INSERT INTO sites (slug, name) VALUES ('bench', 'Bench') RETURNING id");
	const siteId = site.rows[0]?.id ?? 0;
	const tags = await pool.query<{ id: number }>(
		"INSERT INTO tags (site_id, name, unit, published_at) SELECT $1, 'TAG-' || n, 'mm/s', now() FROM generate_series(1, $2::int) AS n RETURNING id",
		[siteId, TAGS],
	);
	return {
		pool,
		url: cluster.url,
		siteId,
		tagIds: tags.rows.map((row) => row.id),
		async remove() {
			await pool.end();
			await cluster.remove();
		},
	};
}

async function storeBenches(): Promise<void> {
	const store = await layStore();
	const { pool, url, siteId, tagIds } = store;
	try {
		if (wants('trend-growth')) print(await benchTrendGrowth(pool, tagIds[0] ?? 0));
		if (wants('ingest')) print(await benchIngest(pool, siteId, tagIds));
		if (wants('packing')) print(await benchPacking(pool, siteId, tagIds));
		if (wants('feed')) print(await benchFeed(pool, url, siteId, tagIds));
		if (wants('mqtt')) print(await benchMqtt(pool, siteId, tagIds.slice(0, 100)));
		if (wants('freshness')) print(await benchFreshness(pool, siteId));
	} finally {
		await store.remove();
	}
}

async function growthBench(): Promise<void> {
	const [full, empty] = [await layStore(), await layStore()];
	try {
		print(await benchIngestGrowth(full, empty));
	} finally {
		await full.remove();
		await empty.remove();
	}
}
