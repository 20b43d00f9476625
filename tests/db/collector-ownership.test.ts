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
import { sampleOf } from '../support/scripted-source.ts';

/** A site of one source with one tag, in a database of its own. */
async function layStand() {
	const database = await cloneDatabase();
	const site = await CollectingSite.lay(database.url);
	const { id: sourceId, device } = await site.addSource('press line');
	const tagId = (await site.publish('press line', { tag: 'steady' })).steady ?? 0;
	const ownerOf = async () => {
		const found = await site.pool.query<{ owner: string | null; token: number }>(
			'SELECT owner, token FROM source_leases WHERE source_id = $1',
			[sourceId],
		);
		return found.rows[0];
	};
	return { database, site, sourceId, device, tagId, ownerOf };
}
type Stand = Awaited<ReturnType<typeof layStand>>;

const folder = mkdtempSync(join(tmpdir(), 'millrace-test-'));
const children: ChildProcess[] = [];
let stand: Stand;
let killed: Stand;
/** Milliseconds from the kill of a collector until another ran its source; it passes beside the other tests. */
let takeover: Promise<number>;

beforeAll(async () => {
	killed = await layStand();
	const child = await startProcess(killed);
	const other = await killed.site.start();
	expect(other.supervisor.runs.size).toBe(0);
	child.kill('SIGKILL');
	await once(child, 'exit');
	const killedAt = performance.now();
	takeover = until('the other runs it', () => killed.device.isConnected, 20_000).then(() => performance.now() - killedAt);
	takeover.catch(() => undefined);
	stand = await layStand();
});
afterAll(async () => {
	for (const child of children) {
		if (child.exitCode !== null || child.signalCode !== null) continue;
		child.kill('SIGKILL');
		await once(child, 'exit');
	}
	for (const { site, database } of [stand, killed]) {
		await site.end();
		await database.drop();
	}
	rmSync(folder, { recursive: true, force: true });
});

/** The collector as it is started beside the app, once it owns the source. No device answers it: only whose the lease is counts here. */
async function startProcess({ database, ownerOf }: Stand): Promise<ChildProcess> {
	const before = (await ownerOf())?.owner ?? null;
	const child = spawn(process.execPath, ['--import', 'tsx', 'src/collector/main.ts'], {
		env: { ...process.env, DATABASE_URL: database.url, MILLRACE_DATA: folder, MILLRACE_LOG: 'silent' },
		stdio: 'ignore',
	});
	children.push(child);
	await until(
		'the process owns the source',
		async () => {
			const lease = await ownerOf();
			return lease && lease.owner !== before ? lease.owner : null;
		},
		20_000,
	);
	return child;
}

describe('a source', () => {
	it('is run by one of two collectors, and by the other as soon as the first stops cleanly', async () => {
		const { site, device, tagId, ownerOf } = stand;
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
		const { site, device, sourceId } = stand;
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
		const { site, device, sourceId, ownerOf } = stand;
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
		const ms = await takeover;
		expect(ms).toBeLessThan(15_000);
		expect(ms).toBeGreaterThan((TERM_S - 4) * 1_000);
		await killed.device.send(sampleOf(killed.tagId, 3));
		expect(await killed.site.values(killed.tagId)).toEqual([3]);
	});

	it('is given back by the process when it is asked to end', async () => {
		const child = await startProcess(stand);
		child.kill('SIGTERM');
		const [code] = await once(child, 'exit');
		expect(code).toBe(0);
		expect((await stand.ownerOf())?.owner).toBeNull();
	});
});
