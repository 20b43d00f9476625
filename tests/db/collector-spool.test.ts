import { type ChildProcess, spawn } from 'node:child_process';
import { once } from 'node:events';
import { appendFileSync, mkdtempSync, readdirSync, rmSync, statSync, writeFileSync } from 'node:fs';
import { createServer, type Server } from 'node:net';
import { tmpdir } from 'node:os';
import { join } from 'node:path';
import { Aedes } from 'aedes';
import mqtt from 'mqtt';
import { afterAll, beforeAll, describe, expect, it } from 'vitest';
import { cloneDatabase, createCluster, createTemplate, type Cluster } from '../support/cluster.ts';
import { CollectingSite, pause, until } from '../support/collecting-site.ts';
import { sampleOf, type ScriptedDevice } from '../support/scripted-source.ts';

let cluster: Cluster;
const folder = mkdtempSync(join(tmpdir(), 'millrace-spool-'));
let serial = 0;
const dataFolder = () => mkdtempSync(join(folder, `${(serial += 1)}-`));

beforeAll(async () => {
	cluster = await createCluster();
	await createTemplate(cluster);
	// Test clusters may lose what they committed last; here it must be kept, as in a real one.
	appendFileSync(join(cluster.folder, 'postgresql.auto.conf'), 'synchronous_commit = on\n');
	cluster.stop('fast');
	cluster.start();
});
afterAll(() => {
	cluster.remove();
	rmSync(folder, { recursive: true, force: true });
});

interface Stand {
	site: CollectingSite;
	device: ScriptedDevice;
	sourceId: string;
	tagId: number;
}

async function layStand(): Promise<Stand> {
	const site = await CollectingSite.lay((await cloneDatabase(cluster.url)).url);
	const { id: sourceId, device } = await site.addSource('press line');
	const tagId = (await site.publish('press line', { tag: 'steady' })).steady ?? 0;
	return { site, device, sourceId, tagId };
}

const numbers = (count: number) => Array.from({ length: count }, (_, index) => index + 1);

/** Events in a source's log that tell a loss, with the counted readings. */
async function toldLosses({ site, sourceId }: Stand): Promise<{ code: string; count: number }[]> {
	const found = await site.pool.query<{ code: string; text: string }>(
		"SELECT code, text FROM source_events WHERE source_id = $1 AND code LIKE 'lost-%' ORDER BY id",
		[sourceId],
	);
	return found.rows.map(({ code, text }) => ({ code, count: Number(text.split(' ')[0]) }));
}

describe('while PostgreSQL is away a collector with a spool', () => {
	it('takes samples at once, and delivers each exactly once and in order when it is back, live values beside', async () => {
		const stand = await layStand();
		const { site, device, tagId } = stand;
		const data = dataFolder();
		const collector = await site.start('one', { folder: data });
		await until('the source runs', () => device.isConnected);
		const cursor = await site.cursor();
		await device.send(sampleOf(tagId, 1));
		cluster.stop('fast');
		const base = Date.now();
		const sending = [];
		for (let n = 2; n <= 400; n += 1) {
			sending.push(device.send(sampleOf(tagId, n, base + n)));
			await pause(2);
		}
		const answers = await Promise.all(sending);
		expect(answers.every((answer) => answer === 'spooled' || answer === 'stored')).toBe(true);
		expect(answers.at(-1)).toBe('spooled');
		const { spool } = collector.pipeline;
		expect(spool?.state.readings).toBeGreaterThan(300);
		// Others on the machine must not read what a plant measured.
		for (const file of readdirSync(data)) expect(statSync(join(data, file)).mode & 0o077).toBe(0);
		cluster.start();
		await until('the database is back', () => !collector.pipeline.isDown, 15_000);
		await device.send(...numbers(20).map((n) => sampleOf(tagId, 400 + n, base + 400 + n)));
		await until('the spool is empty', () => spool?.state.readings === 0, 15_000);
		expect(await site.values(tagId)).toEqual(numbers(420));
		const fed = await site.fed(cursor, tagId);
		expect([...fed].sort((a, b) => (a ?? 0) - (b ?? 0))).toEqual(numbers(420));
		// Oldest first: what was spooled is fed in the order of its time.
		const spooled = fed.filter((value) => (value ?? 0) <= 400);
		expect(spooled).toEqual(numbers(400));
		await until('the latest value', async () => (await site.latest('steady'))?.value === 420);
		expect(collector.pipeline.counts.dropped).toBe(0);
		await site.end();
	});

	it('keeps an alarm that begins in the outage: one alarm, raised at the moment when its delay ran out', async () => {
		const stand = await layStand();
		const { site, device, tagId } = stand;
		await site.limit({ tag: 'steady', kind: 'high', level: 'alert', value: 5, raise_after_s: 2, clear_after_s: 0 });
		const collector = await site.start('one', { folder: dataFolder() });
		await until(
			'the source runs with its limit',
			() => device.isConnected && collector.pipeline.tags.get(tagId)?.plan.limits.length === 1,
		);
		const base = Date.now() - 60_000;
		await device.send(sampleOf(tagId, 1, base));
		cluster.stop('fast');
		for (let second = 1; second <= 6; second += 1) await device.send(sampleOf(tagId, 9, base + second * 1_000));
		cluster.start();
		await until('the database is back', () => !collector.pipeline.isDown, 15_000);
		await device.send(sampleOf(tagId, 9, base + 7_000));
		await device.send(sampleOf(tagId, 1, base + 8_000));
		await until('the spool is empty', () => collector.pipeline.spool?.state.readings === 0, 15_000);
		const alarms = await until('the alarm has cleared', async () => {
			const found = await site.alarms(tagId);
			return found.length > 0 && found.every((alarm) => alarm.cleared_at) ? found : null;
		});
		// Held from 1 s on, so that two seconds later it was raised.
		expect(alarms.map((alarm) => [alarm.raised_at.getTime() - base, (alarm.cleared_at?.getTime() ?? 0) - base])).toEqual([
			[3_000, 8_000],
		]);
		await site.end();
	});

	it('refuses what a full spool has no room for, and tells how many: sent is stored and told', async () => {
		const stand = await layStand();
		const { site, device, tagId } = stand;
		const collector = await site.start('one', { folder: dataFolder(), maxBytes: 150_000 });
		await until('the source runs', () => device.isConnected);
		cluster.stop('fast');
		const base = Date.now();
		let refused = 0;
		let sent = 0;
		while (refused < 500 && sent < 200_000) {
			const batch = numbers(1_000).map((n) =>
				sampleOf(tagId, sent + n, base + sent + n, { raw: { kind: 'variant', dataType: 'Double', value: Math.sin(sent + n) } }),
			);
			sent += batch.length;
			const answer = await device.send(...batch);
			if (typeof answer === 'object') refused += answer.dropped;
		}
		expect(refused).toBeGreaterThanOrEqual(500);
		expect(collector.pipeline.spool?.state.isFull).toBe(true);
		cluster.start();
		await until('the database is back', () => !collector.pipeline.isDown, 15_000);
		await until('the spool is empty', () => collector.pipeline.spool?.state.readings === 0, 20_000);
		const told = await until('the loss is told', async () => {
			const losses = await toldLosses(stand);
			return losses.length > 0 ? losses : null;
		});
		expect(told).toEqual([{ code: 'lost-spool-full', count: refused }]);
		expect((await site.values(tagId)).length + refused).toBe(sent);
		await site.end();
	});

	it('that has no cache to go on from samples nothing, and counts that as lost when the database is back', async () => {
		const stand = await layStand();
		const { site, device } = stand;
		const first = await site.start('one', { folder: dataFolder() });
		await until('the source runs', () => device.isConnected);
		// As if it had been killed: its leases still stand in its name.
		await first.stop();
		await site.pool.query(
			`INSERT INTO source_leases (source_id, owner, instance, until) VALUES ($1, gen_random_uuid(), 'one', clock_timestamp() + interval '1 minute')
			 ON CONFLICT (source_id) DO UPDATE SET owner = excluded.owner, instance = excluded.instance, until = excluded.until`,
			[stand.sourceId],
		);
		const data = dataFolder();
		writeFileSync(join(data, 'cache.db'), 'spoiled'.repeat(2_000));
		cluster.stop('fast');
		const opens = device.opens;
		const second = await site.start('one', { folder: data });
		await pause(1_500);
		expect(device.opens).toBe(opens);
		cluster.start();
		await until('the source runs again', () => device.isConnected, 20_000);
		const told = await until('the loss is told', async () => {
			const losses = await toldLosses(stand);
			return losses.length > 0 ? losses : null;
		});
		expect(told.map(({ code }) => code)).toEqual(['lost-not-sampled']);
		expect(told[0]?.count).toBeGreaterThan(10); // a tag of 100 ms for more than 1.5 s
		await second.stop();
		await site.end();
	});
});

describe('what an earlier run left in the spool', () => {
	it('is stored though another collector runs the source by now; its alarms are recorded as found afterwards', async () => {
		const { site, device, sourceId, tagId } = await layStand();
		await site.limit({ tag: 'steady', kind: 'high', level: 'alert', value: 5, raise_after_s: 0, clear_after_s: 0 });
		const data = dataFolder();
		const first = await site.start('one', { folder: data });
		await until('it runs with its limit', () => device.isConnected && first.pipeline.tags.get(tagId)?.plan.limits.length === 1);
		const base = Date.now() - 60_000;
		await device.send(sampleOf(tagId, 1, base));
		cluster.stop('fast');
		for (const [n, value] of [9, 8, 2].entries()) await device.send(sampleOf(tagId, value, base + 1_000 + n * 1_000));
		await first.stop();
		cluster.start();
		await site.pool.query(
			"UPDATE source_leases SET owner = gen_random_uuid(), instance = 'another', token = token + 1, until = clock_timestamp() + interval '5 minutes' WHERE source_id = $1",
			[sourceId],
		);
		const next = await site.start('one', { folder: data });
		await until('all is stored', async () => (await site.values(tagId)).length === 4);
		expect(await site.values(tagId)).toEqual([1, 9, 8, 2]);
		expect(device.standing).toBe(0);
		const alarms = await site.pool.query<{ is_late: boolean; raised_at: Date; cleared_at: Date }>(
			'SELECT is_late, raised_at, cleared_at FROM alarms WHERE tag_id = $1',
			[tagId],
		);
		// Began with the first value beyond the limit and ended with the first that was not.
		expect(
			alarms.rows.map((alarm) => [alarm.is_late, alarm.raised_at.getTime() - base, alarm.cleared_at.getTime() - base]),
		).toEqual([[true, 1_000, 3_000]]);
		const judged = await site.pool.query<{ at: number }>(
			"SELECT (state->>'lastAt')::float8 AS at FROM judging_states WHERE tag_id = $1",
			[tagId],
		);
		expect(judged.rows[0]?.at).toBe(base);
		await next.stop();
		await site.end();
	});

	it('is put aside and counted as lost where the file cannot be read: sent is stored and told', async () => {
		const stand = await layStand();
		const { site, device, tagId } = stand;
		const data = dataFolder();
		const first = await site.start('one', { folder: data });
		await until('it runs', () => device.isConnected);
		await device.send(sampleOf(tagId, 0));
		cluster.stop('fast');
		const base = Date.now();
		await device.send(...numbers(120).map((n) => sampleOf(tagId, n, base + n)));
		await first.stop();
		cluster.start();
		writeFileSync(join(data, 'spool.db'), 'spoiled'.repeat(2_000));
		const next = await site.start('one', { folder: data });
		const told = await until('the loss is told', async () => {
			const losses = await toldLosses(stand);
			return losses.length > 0 ? losses : null;
		});
		expect(told).toEqual([{ code: 'lost-spool-broken', count: 120 }]);
		expect(await site.values(tagId)).toEqual([0]);
		expect(readdirSync(data).filter((name) => name.startsWith('spool.db.broken-'))).toHaveLength(1);
		await until('it runs again', () => device.isConnected);
		await device.send(sampleOf(tagId, 500));
		expect(await site.values(tagId)).toEqual([0, 500]);
		await next.stop();
		await site.end();
	});
});

describe('a stale alarm that is held back for a lost source', () => {
	it('is raised after a restart of the collector when the source comes back without the tag', async () => {
		const { site, device, tagId } = await layStand();
		const tags = await site.publish('press line', { tag: 'first', stale_after_s: 1 }, { tag: 'steady', stale_after_s: 1 });
		const other = tags.first ?? 0;
		await site.limit({ tag: 'steady', kind: 'stale', level: 'alert' });
		const first = await site.start('one');
		await until('it runs with its limit', () => device.isConnected && first.pipeline.tags.get(tagId)?.plan.limits.length === 1);
		await device.send(sampleOf(tagId, 1), sampleOf(other, 1));
		device.lose();
		await until('the silence is judged and held back', async () => {
			const held = await site.pool.query("SELECT FROM judging_states WHERE tag_id = $1 AND state ? 'heldBack'", [tagId]);
			return held.rowCount === 1;
		});
		await first.stop();
		expect(await site.alarms(tagId)).toEqual([]);
		device.recover();
		const next = await site.start('one');
		await until('it runs again', () => device.isConnected);
		const again = setInterval(() => device.isConnected && void device.send(sampleOf(other, Math.random())), 200);
		try {
			const alarms = await until('its stale alarm', async () => {
				const found = await site.alarms(tagId);
				return found.length > 0 && found;
			});
			expect(alarms).toMatchObject([{ direction: 'stale', cleared_at: null }]);
		} finally {
			clearInterval(again);
		}
		await next.stop();
		await site.end();
	});
});

describe('a collector that is killed while PostgreSQL is away', () => {
	let broker: Aedes;
	let server: Server;
	const children: ChildProcess[] = [];

	beforeAll(async () => {
		broker = await Aedes.createBroker();
		server = createServer(broker.handle);
		server.listen(0, '127.0.0.1');
		await once(server, 'listening');
	});
	afterAll(async () => {
		for (const child of children) {
			if (child.exitCode !== null || child.signalCode !== null) continue;
			child.kill('SIGKILL');
			await once(child, 'exit');
		}
		await new Promise((resolve) => broker.close(() => resolve(undefined)));
		server.close();
	});

	it('goes on without it in its next run, and every message that it acknowledged is stored once', async () => {
		const site = await CollectingSite.lay((await cloneDatabase(cluster.url)).url);
		const { port } = server.address() as { port: number };
		await site.pool.query(`INSERT INTO sources (site_id, name, kind, settings) VALUES ($1, 'broker', 'mqtt', $2)`, [
			site.siteId,
			JSON.stringify({ url: `mqtt://127.0.0.1:${port}`, client_id: 'spool-test', protocol_version: 4, qos: 1, payload: 'json' }),
		]);
		const tags = await site.publishRows({
			tag: 'count',
			source: 'broker',
			topic: 'count',
			unit: '1',
			interval_ms: 100,
			stale_after_s: 60,
		});
		const tagId = tags.count ?? 0;
		const data = dataFolder();
		const start = () => {
			const child = spawn(process.execPath, ['--import', 'tsx', 'src/collector/main.ts'], {
				env: { ...process.env, DATABASE_URL: site.url, MILLRACE_DATA: data, MILLRACE_LOG: 'silent' },
				stdio: 'ignore',
			});
			children.push(child);
			return child;
		};
		const publisher = await mqtt.connectAsync(`mqtt://127.0.0.1:${port}`, { clientId: 'publisher' });
		let sent = 0;
		const publish = async (count: number) => {
			for (let n = 0; n < count; n += 1) {
				await publisher.publishAsync('count', String((sent += 1)), { qos: 1 });
				await pause(2);
			}
		};
		let standing = 0;
		broker.on('clientReady', (client) => (standing += client.id === 'spool-test' ? 1 : 0));
		broker.on('clientDisconnect', (client) => (standing -= client.id === 'spool-test' ? 1 : 0));
		const isSubscribed = () => standing > 0;
		const first = start();
		await until('it subscribes', isSubscribed, 20_000);
		await pause(500);
		await publish(50);
		await until('values are stored', async () => (await site.values(tagId)).length >= 50, 10_000);
		cluster.stop('fast');
		await publish(150);
		await pause(600);
		first.kill('SIGKILL');
		await once(first, 'exit');
		await until('the broker knows', () => !isSubscribed());
		await publish(50); // kept by the broker for the session
		start();
		await until('it subscribes again without the database', isSubscribed, 20_000);
		await publish(100);
		await pause(600);
		cluster.start();
		await until('all is stored', async () => (await site.values(tagId).catch(() => [])).length >= sent, 30_000);
		await publish(10);
		await until('live values go on', async () => (await site.values(tagId)).length >= sent, 10_000);
		const stored = await site.values(tagId);
		expect([...stored].sort((a, b) => (a ?? 0) - (b ?? 0))).toEqual(numbers(sent));
		await publisher.endAsync();
		await site.end();
	}, 120_000);
});
