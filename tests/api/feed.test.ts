import { afterAll, beforeAll, describe, expect, it } from 'vitest';
import { createCopyWriter, type CopyWriter } from '#lib/pipeline/store/copy-writer.ts';
import { createPool, type Pool } from '#lib/server/db/pool.ts';
import { createApp, type App } from '../support/app.ts';
import { layPlant, layTag, type Plant } from '../support/plant.ts';
import { batchOf, storedReading } from '../support/readings.ts';

let app: App;
let plant: Plant;
let pool: Pool;
let writer: CopyWriter;
let key: string;
let ids: number[];
const at = '/api/v1/sites/saltmere';
const BEGIN = Date.now() - 3_600_000;
const iso = (ms: number) => encodeURIComponent(new Date(ms).toISOString());

interface FeedAnswer {
	items: { kind: string; tag: string; value: number | null; quality: { name: string; severity: string }; time_from: string }[];
	cursor: string;
	behind: { seconds: number; readings: number };
}
const get = async <T>(path: string): Promise<T> => (await app.ask(path, { key })).json() as Promise<T>;

beforeAll(async () => {
	app = await createApp();
	plant = await layPlant(app.sql);
	key = plant.keys.read;
	ids = [await layTag(app.sql, plant.siteId, 'A'), await layTag(app.sql, plant.siteId, 'B')];
	pool = createPool(app.url, { name: 'test', max: 3 });
	writer = createCopyWriter(pool, { now: Date.now });
	const [a = 0, b = 0] = ids;
	await writer.write(
		batchOf([
			...Array.from({ length: 60 }, (_, n) => storedReading(plant.siteId, a, BEGIN + n * 1_000, n)),
			storedReading(plant.siteId, b, BEGIN, null),
		]),
	);
});
afterAll(async () => {
	await writer.close();
	await pool.end();
	await app.close();
});

describe('the feed', () => {
	it('from 0 gives every stored reading once, in pages that the cursor joins, and then nothing', async () => {
		let cursor = '0';
		const seen: string[] = [];
		for (let page = 0; page < 10; page += 1) {
			const answer = await get<FeedAnswer>(`${at}/feed?after=${cursor}&limit=25`);
			expect(answer.items.length).toBeLessThanOrEqual(25);
			expect(answer.cursor).toMatch(/^[A-Za-z0-9._-]+$/);
			seen.push(...answer.items.map(({ tag, value }) => `${tag} ${value}`));
			cursor = answer.cursor;
		}
		expect(seen).toHaveLength(61);
		expect(new Set(seen).size).toBe(61);
	});

	it('gives a bad reading without a value and with the standard’s name for why', async () => {
		const answer = await get<FeedAnswer>(`${at}/feed?after=0&tags=B`);
		// BadSensorFailure is 0x808C0000 in the standard's list of status codes.
		expect(answer.items).toMatchObject([
			{ value: null, quality: { code: 0x808c0000, name: 'BadSensorFailure', severity: 'bad' } },
		]);
	});

	it('without a cursor begins now, and a waiting reader is woken by what is stored', async () => {
		const now = await get<FeedAnswer>(`${at}/feed`);
		expect(now.items).toEqual([]);
		const waiting = get<FeedAnswer>(`${at}/feed?after=${now.cursor}&wait=20`);
		await writer.write(batchOf([storedReading(plant.siteId, ids[0] ?? 0, BEGIN + 100_000, 100)]));
		const woken = await waiting;
		expect(woken.items.map(({ value }) => value)).toEqual([100]);
	});

	it('refuses what is no cursor, and answers 410 to one of another epoch', async () => {
		expect((await app.ask(`${at}/feed?after=nonsense`, { key })).status).toBe(400);
		const gone = await app.ask(`${at}/feed?after=00000000.5`, { key });
		expect([gone.status, (await gone.json()).type]).toEqual([410, 'urn:millrace:problem:cursor-gone']);
		expect((await app.ask(`${at}/feed?tags=A,nowhere`, { key })).status).toBe(400);
	});

	it('streams everything up to now as NDJSON and CSV, with the cursor after it in a header', async () => {
		const lines = await app.ask(`${at}/feed?after=0`, { key, headers: { accept: 'application/x-ndjson' } });
		expect((await lines.text()).trimEnd().split('\n')).toHaveLength(62);
		const rest = await get<FeedAnswer>(`${at}/feed?after=${lines.headers.get('x-next-cursor')}`);
		expect(rest.items).toEqual([]);
		const csv = await app.ask(`${at}/feed?after=0&limit=10`, { key, headers: { accept: 'text/csv' } });
		expect((await csv.text()).trimEnd().split('\r\n')).toHaveLength(11);
	});
});

describe('the stream', () => {
	/** Events until `count` of them came. */
	async function events(answer: Response, count: number): Promise<Record<string, string>[]> {
		const reader = (answer.body ?? new ReadableStream<Uint8Array>()).getReader();
		const decoder = new TextDecoder();
		let text = '';
		const parse = () =>
			text
				.split('\n\n')
				.slice(0, -1)
				.filter((block) => block.includes('event:'))
				.map((block) => Object.fromEntries(block.split('\n').map((line) => line.split(/: (.*)/s) as [string, string])));
		while (parse().length < count) {
			const { done, value } = await reader.read();
			if (done) break;
			text += decoder.decode(value, { stream: true });
		}
		await reader.cancel();
		return parse();
	}

	it('gives readings with the cursor after them as id, and Last-Event-ID wins over after', async () => {
		const first = await app.ask(`${at}/stream?after=0`, { key });
		expect(first.headers.get('content-type')).toBe('text/event-stream');
		const [event] = await events(first, 1);
		expect(event?.event).toBe('readings');
		expect(JSON.parse(event?.data ?? '{}').items).toHaveLength(62);
		const second = await app.ask(`${at}/stream?after=0`, { key, headers: { 'last-event-id': event?.id ?? '' } });
		const following = events(second, 1);
		await writer.write(batchOf([storedReading(plant.siteId, ids[1] ?? 0, BEGIN + 200_000, 7)]));
		expect(JSON.parse((await following)[0]?.data ?? '{}').items).toMatchObject([{ tag: 'B', value: 7 }]);
	});

	it('tells a reader whose cursor is too old that it is gone, and ends', async () => {
		const answer = await app.ask(`${at}/stream?after=00000000.5`, { key });
		expect(await answer.text()).toMatch(/^event: gone\n/);
	});
});

describe('readings and trend', () => {
	it('come over a half-open range, in pages, either way round', async () => {
		type Page = { unit: string; items: { value: number }[]; next: string | null };
		const range = `from=${iso(BEGIN)}&to=${iso(BEGIN + 10_000)}`;
		const first = await get<Page>(`${at}/tags/A/readings?${range}&limit=6`);
		const second = await get<Page>(`${at}/tags/A/readings?${range}&limit=6&after=${first.next}`);
		expect([...first.items, ...second.items].map(({ value }) => value)).toEqual([0, 1, 2, 3, 4, 5, 6, 7, 8, 9]);
		expect([first.unit, second.next]).toEqual(['mm/s', null]);
		const newest = await get<Page>(`${at}/tags/A/readings?${range}&order=newest&limit=2`);
		expect(newest.items.map(({ value }) => value)).toEqual([9, 8]);
	});

	it('stream a whole range as CSV', async () => {
		const answer = await app.ask(`${at}/tags/A/readings`, { key, headers: { accept: 'text/csv' } });
		const lines = (await answer.text()).trimEnd().split('\r\n');
		expect(lines[0]).toBe('at,value,quality,quality_name,time_from');
		expect(lines).toHaveLength(62);
	});

	it('a trend has at most the points asked for, and its extremes are the readings’', async () => {
		const range = `from=${iso(BEGIN)}&to=${iso(BEGIN + 60_000)}`;
		const { items } = await get<{ items: { min: number; max: number; n: number }[] }>(`${at}/tags/A/trend?${range}&points=10`);
		expect(items.length).toBeLessThanOrEqual(10);
		expect(Math.min(...items.map(({ min }) => min))).toBe(0);
		expect(Math.max(...items.map(({ max }) => max))).toBe(59);
		expect(items.reduce((sum, { n }) => sum + n, 0)).toBe(60);
		expect((await app.ask(`${at}/tags/A/trend?from=${iso(BEGIN)}&to=${iso(BEGIN)}`, { key })).status).toBe(400);
		expect((await app.ask(`${at}/tags/nowhere/trend`, { key })).status).toBe(404);
	});
});

it('latest lists every tag with the cursor before the read; one without a reading waits for initial data', async () => {
	type Page = { items: { tag: string; at: string | null; quality: { name: string } }[]; cursor: string; next: string | null };
	const first = await get<Page>(`${at}/latest?limit=1`);
	const second = await get<Page>(`${at}/latest?limit=1&after=${first.next}`);
	expect([...first.items, ...second.items].map(({ tag, at: time, quality }) => [tag, time, quality.name])).toEqual([
		['A', null, 'BadWaitingForInitialData'],
		['B', null, 'BadWaitingForInitialData'],
	]);
	expect(second.next).toBeNull();
	expect((await get<FeedAnswer>(`${at}/feed?after=${first.cursor}`)).items).toEqual([]);
	expect((await app.ask(`${at}/latest?tags=nowhere`, { key })).status).toBe(400);
});

it('a trace lays out the stations of the reading at or just before a time, and says when there is none', async () => {
	const trace = await get<{ value: number; at: string; hops: { hop: string }[] }>(`${at}/tags/A/trace?at=${iso(BEGIN + 5_500)}`);
	expect([trace.value, trace.at]).toEqual([5, new Date(BEGIN + 5_000).toISOString()]);
	expect(trace.hops.map(({ hop }) => hop).slice(0, 7)).toEqual([
		'wire',
		'decode',
		'scale',
		'convert',
		'quality',
		'verdict',
		'stored',
	]);
	const none = await app.ask(`${at}/tags/A/trace?at=${iso(BEGIN - 1)}`, { key });
	expect([none.status, (await none.json()).code]).toEqual([404, 'no-reading']);
	expect((await app.ask(`${at}/tags/nowhere/trace`, { key })).status).toBe(404);
});
