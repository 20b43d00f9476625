import { appendFileSync } from 'node:fs';
import { join } from 'node:path';
import { afterAll, beforeAll, describe, expect, it } from 'vitest';
import { cloneDatabase, createCluster, createTemplate, type Cluster } from '../support/cluster.ts';
import { CollectingSite, pause, until, type Collector } from '../support/collecting-site.ts';
import { sampleOf, type ScriptedDevice } from '../support/scripted-source.ts';

let cluster: Cluster;
let site: CollectingSite;
let device: ScriptedDevice;
let collector: Collector;
let tagId: number;

beforeAll(async () => {
	// A cluster of its own: other files go on using theirs while this one is stopped.
	cluster = await createCluster();
	await createTemplate(cluster);
	// Test clusters may lose what they committed last; here it must be kept, as in a real one.
	appendFileSync(join(cluster.folder, 'postgresql.auto.conf'), 'synchronous_commit = on\n');
	cluster.stop('fast');
	cluster.start();
	site = await CollectingSite.lay((await cloneDatabase(cluster.url)).url);
	({ device } = await site.addSource('press line'));
	tagId = (await site.publish('press line', { tag: 'steady' })).steady ?? 0;
	collector = await site.start();
	await until('the source runs', () => device.isConnected);
});
afterAll(async () => {
	await site.end();
	cluster.remove();
});

describe('while PostgreSQL is away', () => {
	it.each([
		['fast', 3_000],
		['immediate', 1_000],
	] as const)(
		'stopped (%s) for %i ms, samples wait in memory, and afterwards every one is stored and fed exactly once',
		async (mode, away) => {
			const cursor = await site.cursor();
			const stored = (await site.values(tagId)).length;
			const base = stored * 10;
			let sent = 0;
			const answers: unknown[] = [];
			const sending = setInterval(() => {
				for (let i = 0; i < 5; i += 1)
					void device.send(sampleOf(tagId, base + ++sent, Date.now() + i / 10)).then((one) => answers.push(one));
			}, 20);
			try {
				await until('values flow', () => sent > 50);
				cluster.stop(mode);
				const answered = answers.length;
				await until('the pipeline knows', () => collector.pipeline.isDown);
				await pause(away);
				// Nothing is said to be stored that is not.
				expect(answers.length - answered).toBeLessThan(sent - answered);
				expect(collector.pipeline.counts.waiting).toBeGreaterThan(100);
				cluster.start();
				await until('it is written again', () => !collector.pipeline.isDown, 10_000);
				await pause(300);
			} finally {
				clearInterval(sending);
			}
			await device.send(sampleOf(tagId, -1));
			const kept = (await site.values(tagId)).slice(stored);
			expect(kept.length).toBe(new Set(kept).size);
			expect(new Set(kept)).toEqual(new Set([...Array.from({ length: sent }, (_, i) => base + i + 1), -1]));
			expect(await site.fed(cursor, tagId)).toEqual([...Array.from({ length: sent }, (_, i) => base + i + 1), -1]);
			expect(answers.length).toBe(sent);
			expect(new Set(answers)).toEqual(new Set(['stored']));
			expect(collector.pipeline.counts.dropped).toBe(0);
			expect(device.opens).toBe(1);
		},
	);

	it('a collector that is stopped ends within its grace and says what it could not keep', async () => {
		cluster.stop('fast');
		const started = performance.now();
		const answer = device.send(sampleOf(tagId, 1));
		await collector.stop();
		expect(performance.now() - started).toBeLessThan(12_000);
		expect(await answer).toMatchObject({ dropped: 1 });
		expect(collector.pipeline.counts.dropped).toBe(1);
		cluster.start();
	});
});
