import { spawn, type ChildProcess } from 'node:child_process';
import { randomUUID } from 'node:crypto';
import { once } from 'node:events';
import { mkdtempSync, rmSync } from 'node:fs';
import { tmpdir } from 'node:os';
import { join } from 'node:path';
import { afterAll, beforeAll, describe, expect, it } from 'vitest';
import { renewLeases, TERM_S } from '../../src/collector/lease.ts';
import { cloneDatabase } from '../support/cluster.ts';
import { CollectingSite, pause, until } from '../support/collecting-site.ts';
import { sampleOf, type ScriptedDevice } from '../support/scripted-source.ts';

let database: Awaited<ReturnType<typeof cloneDatabase>>;
let site: CollectingSite;
let device: ScriptedDevice;
let sourceId: string;
let tagId: number;
const folder = mkdtempSync(join(tmpdir(), 'millrace-test-'));
const children: ChildProcess[] = [];

beforeAll(async () => {
	database = await cloneDatabase();
	site = await CollectingSite.lay(database.url);
	({ id: sourceId, device } = await site.addSource('press line'));
	tagId = (await site.publish('press line', { tag: 'steady' })).steady ?? 0;
});
afterAll(async () => {
	for (const child of children) {
		if (child.exitCode !== null || child.signalCode !== null) continue;
		child.kill('SIGKILL');
		await once(child, 'exit');
	}
	await site.end();
	await database.drop();
	rmSync(folder, { recursive: true, force: true });
});

async function ownerOf(): Promise<{ owner: string | null; token: number } | undefined> {
	const found = await site.pool.query<{ owner: string | null; token: number }>(
		'SELECT owner, token FROM source_leases WHERE source_id = $1',
		[sourceId],
	);
	return found.rows[0];
}

/** The collector as it is started beside the app. Its scripted source answers nothing: only whose the lease is counts here. */
async function startProcess(): Promise<{ child: ChildProcess; owner: string }> {
	const before = (await ownerOf())?.owner ?? null;
	const child = spawn(process.execPath, ['--import', 'tsx', 'src/collector/main.ts'], {
		env: { ...process.env, DATABASE_URL: database.url, MILLRACE_DATA: folder, MILLRACE_LOG: 'silent' },
		stdio: 'ignore',
	});
	children.push(child);
	const owner = await until(
		'the process owns the source',
		async () => {
			const lease = await ownerOf();
			return lease && lease.owner !== before ? lease.owner : null;
		},
		20_000,
	);
	return { child, owner };
}

describe('a source', () => {
	it('is run by one of two collectors, and by the other as soon as the first stops cleanly', async () => {
		const first = await site.start();
		await until('the first runs it', () => device.isConnected);
		const second = await site.start();
		await pause(3_500);
		expect(device.opens).toBe(1);
		expect(first.supervisor.runs.size).toBe(1);
		expect(second.supervisor.runs.size).toBe(0);
		const token = (await ownerOf())?.token ?? 0;
		await device.send(sampleOf(tagId, 1));
		await first.stop();
		expect(device.standing).toBe(0);
		await until('the second runs it', () => device.isConnected, 4_000);
		expect(device.standing).toBe(1);
		expect(await ownerOf()).toEqual({ owner: second.owner.id, token: token + 1 });
		await device.send(sampleOf(tagId, 2));
		expect(await site.values(tagId)).toEqual([1, 2]);
		await second.stop();
	});

	it('is let go at once by a collector that finds its lease with somebody else', async () => {
		const first = await site.start();
		await until('it runs', () => device.isConnected);
		await site.pool.query(
			"UPDATE source_leases SET owner = $2, instance = 'another', token = token + 1, until = clock_timestamp() + interval '5 minutes' WHERE source_id = $1",
			[sourceId, randomUUID()],
		);
		await until('it is let go', () => device.standing === 0, 4_000);
		expect(first.supervisor.runs.size).toBe(0);
		await first.stop();
		await site.pool.query('UPDATE source_leases SET until = clock_timestamp(), owner = NULL WHERE source_id = $1', [sourceId]);
	});

	it('goes at once to the next run of the very collector that vanished with its lease', async () => {
		// Took the lease and was never heard of again.
		const ghost = { id: randomUUID(), instance: 'folder/main' };
		expect(await renewLeases(site.pool, ghost)).toEqual(new Set([sourceId]));
		const other = await site.start();
		expect(other.supervisor.runs.size).toBe(0);
		const next = await site.start('folder/main');
		await until('it runs', () => device.isConnected, 1_000);
		expect((await ownerOf())?.owner).toBe(next.owner.id);
		await other.stop();
		await next.stop();
	});

	it('goes to another collector within 15 s after its own was killed, and not before its term is over', async () => {
		const { child } = await startProcess();
		const other = await site.start();
		expect(other.supervisor.runs.size).toBe(0);
		const lease = await site.pool.query<{ s: number }>(
			'SELECT extract(epoch FROM until - clock_timestamp())::float8 AS s FROM source_leases WHERE source_id = $1',
			[sourceId],
		);
		expect(lease.rows[0]?.s).toBeLessThanOrEqual(TERM_S);
		child.kill('SIGKILL');
		await once(child, 'exit');
		const killedAt = performance.now();
		await until('the other runs it', () => device.isConnected, 15_000);
		expect(performance.now() - killedAt).toBeGreaterThan((TERM_S - 4) * 1_000);
		await device.send(sampleOf(tagId, 3));
		expect(await site.values(tagId)).toEqual([1, 2, 3]);
		await other.stop();
	});

	it('is given back by the process when it is asked to end', async () => {
		const { child } = await startProcess();
		child.kill('SIGTERM');
		const [code] = await once(child, 'exit');
		expect(code).toBe(0);
		expect((await ownerOf())?.owner).toBeNull();
	});
});
