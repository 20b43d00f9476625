import { readFileSync } from 'node:fs';
import { join } from 'node:path';
import { expect, test } from '@playwright/test';
import { ask, makeKey, product } from './support.ts';

interface Page {
	items: { kind: string; tag: string; at: string; value: number | null; quality: { code: number } }[];
	cursor: string;
}

test('a script with a key pulls the feed across a kill of the collector and misses nothing', async () => {
	test.setTimeout(90_000);
	const key = makeKey('historian', 'saltmere', 'read');
	const first = await ask<Page>('/sites/saltmere/feed', key);
	let { cursor } = first;
	const seen = new Map<string, number>();
	const from = new Date().toISOString();
	const pids = JSON.parse(readFileSync(join(product().env.MILLRACE_DATA ?? '', 'processes.json'), 'utf8')) as Record<
		string,
		number
	>;
	const until = Date.now() + 25_000;
	let isKilled = false;
	while (Date.now() < until) {
		const page = await ask<Page>(`/sites/saltmere/feed?after=${cursor}&wait=2&limit=500`, key);
		cursor = page.cursor;
		for (const item of page.items)
			if (item.kind === 'reading')
				seen.set(
					`${item.tag} ${item.at} ${item.value} ${item.quality.code}`,
					(seen.get(`${item.tag} ${item.at} ${item.value} ${item.quality.code}`) ?? 0) + 1,
				);
		if (!isKilled && Date.now() > until - 20_000) {
			process.kill(pids.collector ?? 0, 'SIGKILL');
			isKilled = true;
		}
	}
	expect([...seen.values()].filter((count) => count !== 1)).toEqual([]);
	// What the store holds of one tag from the beginning on is what the feed brought of it.
	const tag = 'B-2.FLOW';
	const stored = await ask<{ items: { at: string; value: number | null; quality: { code: number } }[] }>(
		`/sites/saltmere/tags/${tag}/readings?from=${encodeURIComponent(from)}`,
		key,
	);
	expect(stored.items.length).toBeGreaterThan(2);
	const rest = await ask<Page>(`/sites/saltmere/feed?after=${cursor}&limit=10000`, key);
	for (const item of rest.items) seen.set(`${item.tag} ${item.at} ${item.value} ${item.quality?.code}`, 1);
	const missed = stored.items.filter((item) => !seen.has(`${tag} ${item.at} ${item.value} ${item.quality.code}`));
	expect(missed).toEqual([]);
});
