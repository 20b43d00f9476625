// Tests. A site with scripted devices, laid as people lay one, and collectors that run it in this process.
import { randomUUID } from 'node:crypto';
import { join } from 'node:path';
import type { Limit } from '#lib/domain/limit.ts';
import type { MapRow } from '#lib/domain/tag-map/row.ts';
import { LossLedger } from '#lib/pipeline/loss-ledger.ts';
import { Pipeline } from '#lib/pipeline/pipeline.ts';
import { createCopyWriter } from '#lib/pipeline/store/copy-writer.ts';
import { currentCursor, readFeed, resolveCursor, type FeedEntry } from '#lib/pipeline/store/find-feed.ts';
import { findLatest, type LatestRow } from '#lib/pipeline/store/find-latest.ts';
import { Spool } from '#lib/pipeline/store/spool.ts';
import { ensurePartitionsAhead } from '#lib/pipeline/store/partitions.ts';
import { createPool, type Pool } from '#lib/server/db/pool.ts';
import { saveLimits } from '#lib/server/limits/save-limits.ts';
import { addSite } from '#lib/server/people/add-site.ts';
import { editDraft, type SentRow } from '#lib/server/tag-map/edit-draft.ts';
import { publishDraft } from '#lib/server/tag-map/publish-draft.ts';
import { CollectorCache } from '../../src/collector/cache.ts';
import { registerCollector, type Owner } from '../../src/collector/lease.ts';
import { Supervisor } from '../../src/collector/supervisor.ts';
import { ScriptedDevice } from './scripted-source.ts';

export const actor = { kind: 'command', name: 'test' } as const;

export interface Collector {
	owner: Owner;
	supervisor: Supervisor;
	pipeline: Pipeline;
	/** A clean stop: sources, pipeline, leases, its pool. */
	stop(): Promise<void>;
}

export interface StoredRow {
	at: number;
	value: number | null;
	quality: number;
}

/** Waits until `probe` answers something truthy; looks every 25 ms. */
export async function until<T>(what: string, probe: () => T | Promise<T>, limitMs = 6_000): Promise<NonNullable<T>> {
	const end = performance.now() + limitMs;
	for (;;) {
		const found = await probe();
		if (found) return found;
		if (performance.now() > end) throw new Error(`${what}: not within ${limitMs} ms`);
		await pause(25);
	}
}

export function pause(ms: number): Promise<void> {
	return new Promise((resolve) => setTimeout(resolve, ms));
}

export class CollectingSite {
	readonly url: string;
	readonly pool: Pool;
	readonly siteId: number;
	readonly devices = new Map<string, ScriptedDevice>();
	readonly #collectors = new Set<Collector>();

	private constructor(url: string, pool: Pool, siteId: number) {
		this.url = url;
		this.pool = pool;
		this.siteId = siteId;
	}

	static async lay(url: string): Promise<CollectingSite> {
		const pool = createPool(url, { name: 'test', max: 6 });
		await ensurePartitionsAhead(pool, Date.now());
		const added = await addSite(pool, { slug: 'saltmere', name: 'Saltmere', timeZone: 'UTC', actor, ip: null });
		if (!added.ok) throw new Error(added.reason);
		return new CollectingSite(url, pool, added.value.site.id);
	}

	/** A source of kind OPC UA whose device is scripted. Answers its id and the device. */
	async addSource(name: string): Promise<{ id: string; device: ScriptedDevice }> {
		const made = await this.pool.query<{ id: string }>(
			`INSERT INTO sources (site_id, name, kind, settings) VALUES ($1, $2, 'opcua', '{"endpoint_url":"opc.tcp://127.0.0.1:4840"}') RETURNING id`,
			[this.siteId, name],
		);
		const id = made.rows[0]?.id ?? '';
		const device = new ScriptedDevice();
		this.devices.set(id, device);
		return { id, device };
	}

	/** Adds or changes rows and publishes them; answers the tags' ids by name. */
	async publish(source: string, ...rows: (Partial<MapRow> & { tag: string })[]): Promise<Record<string, number>> {
		return this.publishRows(
			...rows.map((row) => ({
				source,
				node_id: `nsu=urn:example.org:scripted;s=${row.tag}`,
				quantity: 'velocity',
				unit: 'mm/s',
				detector: 'rms',
				interval_ms: 100,
				stale_after_s: 30,
				...row,
			})),
		);
	}

	async publishRows(...rows: SentRow[]): Promise<Record<string, number>> {
		const { pool, siteId } = this;
		const edited = await editDraft(pool, { siteId, mode: 'merge', rows, ifVersion: null, by: actor.name });
		if (!edited.ok) throw new Error(edited.detail ?? edited.reason);
		const published = await publishDraft(pool, { siteId, note: '', actor, ip: null });
		if (!published.ok) throw new Error(`${published.reason}: ${JSON.stringify(edited.value.check.errors)}`);
		const tags = await pool.query<{ id: number; name: string }>('SELECT id, name FROM tags WHERE site_id = $1', [siteId]);
		return Object.fromEntries(tags.rows.map((tag) => [tag.name, tag.id]));
	}

	async limit(...limits: Limit[]): Promise<void> {
		const saved = await saveLimits(this.pool, { siteId: this.siteId, limits, note: '', actor, ip: null });
		if (!saved.ok) throw new Error(JSON.stringify(saved.faults));
	}

	/** Starts a collector with a pool of its own; it stops with the site unless stopped before. With a data folder it spools and has a cache. */
	async start(instance: string = randomUUID(), data?: { folder: string; maxBytes?: number }): Promise<Collector> {
		const pool = createPool(this.url, { name: 'collector', max: 6 });
		const now = () => Date.now();
		const owner: Owner = { id: randomUUID(), instance };
		const register = () => registerCollector(pool, owner, 'localhost', process.pid);
		if (!data) await register();
		const writer = createCopyWriter(pool, { now });
		const spool = data
			? new Spool(
					{
						path: join(data.folder, 'spool.db'),
						maxBytes: data.maxBytes ?? 64 * 1024 * 1024,
						maxAgeMs: 3_600_000,
						minFreeBytes: 0,
						now,
					},
					new LossLedger(),
				)
			: null;
		const cache = data ? new CollectorCache(join(data.folder, 'cache.db'), now()) : null;
		const pipeline = new Pipeline(writer, now, cache ? { spool, remember: (tags) => cache.remember(tags) } : {});
		const supervisor = new Supervisor({
			pool,
			pipeline,
			owner,
			now,
			...(cache ? { cache, register } : {}),
			create: (plan) => {
				const device = this.devices.get(plan.id);
				return device ? Promise.resolve(device.source()) : Promise.reject(new Error('no device of that source'));
			},
		});
		await supervisor.start();
		const collector: Collector = {
			owner,
			supervisor,
			pipeline,
			stop: async () => {
				if (!this.#collectors.delete(collector)) return;
				await supervisor.stop();
				await writer.close();
				cache?.close();
				await pool.end();
			},
		};
		this.#collectors.add(collector);
		return collector;
	}

	async end(): Promise<void> {
		for (const collector of [...this.#collectors]) await collector.stop();
		await this.pool.end();
	}

	async readings(tagId: number): Promise<StoredRow[]> {
		const found = await this.pool.query<{ at: Date; value: number | null; quality: number }>(
			'SELECT at, value, quality FROM readings WHERE tag_id = $1 ORDER BY at',
			[tagId],
		);
		return found.rows.map((row) => ({ at: row.at.getTime(), value: row.value, quality: row.quality >>> 0 }));
	}

	async values(tagId: number): Promise<(number | null)[]> {
		return (await this.readings(tagId)).map((row) => row.value);
	}

	async latest(tag: string): Promise<LatestRow | undefined> {
		return (await findLatest(this.pool, this.siteId, { names: [tag], afterId: 0, limit: 1 })).rows[0];
	}

	cursor(): Promise<string> {
		return currentCursor(this.pool, this.siteId);
	}

	/** The whole feed after a cursor. */
	async feed(after: string): Promise<FeedEntry[]> {
		const from = await resolveCursor(this.pool, this.siteId, after);
		if (!from.ok) throw new Error(from.reason);
		return (await readFeed(this.pool, this.siteId, from.value, { limit: 100_000 })).entries;
	}

	async fed(after: string, tagId: number): Promise<(number | null)[]> {
		return (await this.feed(after)).flatMap((one) => (one.kind === 'reading' && one.tagId === tagId ? [one.value] : []));
	}

	/** Alarms of a tag or source, oldest first. */
	async alarms(of: number | string): Promise<AlarmRow[]> {
		const column = typeof of === 'number' ? 'tag_id' : 'source_id';
		const found = await this.pool.query<AlarmRow>(
			`SELECT id, direction, level, is_test, raised_at, cleared_at, suppressed_count FROM alarms WHERE ${column} = $1 ORDER BY id`,
			[of],
		);
		return found.rows;
	}
}

export interface AlarmRow {
	id: number;
	direction: string;
	level: string;
	is_test: boolean;
	raised_at: Date;
	cleared_at: Date | null;
	suppressed_count: number;
}
