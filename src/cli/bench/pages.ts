// Edge: cli. May touch: a throwaway product, a browser. What a person feels: first content, script size, filtering and scrolling 5,000 rows, memory over time.
import { execFileSync } from 'node:child_process';
import { createServer } from 'node:http';
import type { Browser, CDPSession, Page } from '@playwright/test';
import { openBrowser } from '../browser.ts';
import { startThrowawayProduct, type ThrowawayProduct } from '../throwaway-product.ts';
import { benchLine, median, type BenchLine } from './line.ts';

const ROUNDS = 5;
const MAP_ROWS = 5_000;
/** How long live values are watched for; the whole claim is ten minutes: MILLRACE_BENCH_MINUTES=10. */
const MINUTES = Number(process.env.MILLRACE_BENCH_MINUTES ?? 2);
/** Pages that draw no chart. */
const PLAIN_PAGES = ['', '/sources', '/tag-map', '/machines', '/alarms', '/limits', '/keys', '/audit'];
const SITE = 'saltmere';

/** Lines of the bench `pages`. */
export async function benchPages(): Promise<BenchLine[]> {
	const product = await startThrowawayProduct();
	const browser = await openBrowser();
	try {
		return [
			await firstContent(browser, product),
			await scriptSize(browser, product),
			...(await bigMap(browser, product)),
			await memory(browser, product),
		];
	} finally {
		await browser.close();
		await product.remove();
	}
}

async function enter(browser: Browser, product: ThrowawayProduct): Promise<Page> {
	const context = await browser.newContext({ baseURL: product.origin, viewport: { width: 1_366, height: 768 } });
	// The TypeScript loader wraps named functions in a helper that a page does not have.
	await context.addInitScript('globalThis.__name = (named) => named');
	const page = await context.newPage();
	await page.goto('/sign-in');
	await page.locator(`button[value="demo-${SITE}-integrator"]`).click();
	await page.waitForURL((url) => !url.pathname.includes('sign-in'));
	return page;
}

/** First contentful paint of a page just opened, ms after navigation began [W3C Paint Timing]. */
function firstPaint(page: Page): Promise<number> {
	return page.evaluate(
		() =>
			new Promise<number>((resolve) => {
				const found = (entries: PerformanceEntryList) => {
					const paint = entries.find((entry) => entry.name === 'first-contentful-paint');
					if (paint) resolve(paint.startTime);
				};
				new PerformanceObserver((list) => found(list.getEntries())).observe({ type: 'paint', buffered: true });
			}),
	);
}

async function firstContent(browser: Browser, product: ThrowawayProduct): Promise<BenchLine> {
	const bare = createServer((_, answer) => {
		answer.setHeader('content-type', 'text/html');
		answer.end('<!doctype html><title>bare</title><h1>Needs somebody</h1>');
	});
	await new Promise<void>((resolve) => bare.listen(0, '127.0.0.1', resolve));
	const { port } = bare.address() as { port: number };
	const page = await enter(browser, product);
	const ours: number[] = [];
	const reference: number[] = [];
	for (let round = 0; round < ROUNDS; round += 1) {
		await page.goto(`/${SITE}`);
		ours.push(await firstPaint(page));
		await page.goto(`http://127.0.0.1:${port}/`);
		reference.push(await firstPaint(page));
	}
	await page.context().close();
	bare.close();
	return benchLine(
		'pages',
		ours,
		reference,
		'ms',
		'first content of the overview against a bare page of one line; goal under 1,000 ms',
	);
}

async function scriptSize(browser: Browser, product: ThrowawayProduct): Promise<BenchLine> {
	const sizes: { path: string; bytes: number }[] = [];
	for (const path of PLAIN_PAGES) {
		// A fresh visitor each time: what a cache holds would count as nothing.
		const page = await enter(browser, product);
		const client = await page.context().newCDPSession(page);
		await client.send('Network.enable');
		await client.send('Network.setCacheDisabled', { cacheDisabled: true });
		await page.goto(`/${SITE}${path}`);
		await page.waitForTimeout(1_500);
		const bytes = await page.evaluate(() =>
			(performance.getEntriesByType('resource') as PerformanceResourceTiming[])
				.filter((entry) => new URL(entry.name).pathname.endsWith('.js'))
				.reduce((sum, entry) => sum + entry.encodedBodySize, 0),
		);
		sizes.push({ path: path || '/', bytes });
		await page.context().close();
	}
	const largest = sizes.reduce((most, one) => (one.bytes > most.bytes ? one : most));
	const list = sizes.map((one) => `${one.path} ${Math.round(one.bytes / 1_000)}`).join(', ');
	return benchLine(
		'pages',
		[largest.bytes / 1_000],
		[200],
		'kB',
		`compressed script of the heaviest page without a chart against the goal of 200 kB; each: ${list}`,
	);
}

/** A draft of 5,000 rows, filtered and scrolled. */
async function bigMap(browser: Browser, product: ThrowawayProduct): Promise<BenchLine[]> {
	const { key } = JSON.parse(
		execFileSync(
			process.execPath,
			['src/cli/admin.js', 'key', 'add', '--name', 'bench', '--site', SITE, '--scopes', 'read,map,sources', '--json'],
			{ env: { ...process.env, ...product.env }, encoding: 'utf8' },
		),
	) as { key: string };
	const rows = Array.from({ length: MAP_ROWS }, (_, n) => ({
		tag: `BENCH-${String(n).padStart(5, '0')}.VEL`,
		source: 'Pump-hall broker',
		topic: `bench/${n}`,
		value_pointer: '/value',
		unit: 'mm/s',
		detector: 'rms',
		quantity: 'velocity',
		machine: `M-${n % 100}`,
		area: 'Bench',
	}));
	const saved = await fetch(`${product.origin}/api/v1/sites/${SITE}/map/draft`, {
		method: 'PATCH',
		headers: { authorization: `Bearer ${key}`, 'content-type': 'application/json' },
		body: JSON.stringify({ rows }),
	});
	if (!saved.ok) throw new Error(`the rows were not taken: ${saved.status} ${(await saved.text()).slice(0, 500)}`);

	const page = await enter(browser, product);
	await page.goto(`/${SITE}/tag-map`);
	const filter = page.getByPlaceholder('Filter').first();
	await filter.waitFor();
	await filter.fill('bench-00000');
	await page.getByText('BENCH-00000.VEL').first().waitFor({ timeout: 30_000 });
	await filter.fill('');
	await page.evaluate(() => {
		const kept: number[] = [];
		(window as unknown as { durations: number[] }).durations = kept;
		new PerformanceObserver((list) => {
			for (const entry of list.getEntries())
				if (['keydown', 'input', 'keyup', 'keypress'].includes(entry.name)) kept.push(entry.duration);
		}).observe({ type: 'event', durationThreshold: 16, buffered: false } as PerformanceObserverInit);
	});
	const waits: number[] = [];
	for (let round = 0; round < ROUNDS; round += 1) {
		await page.evaluate(() => ((window as unknown as { durations: number[] }).durations.length = 0));
		await filter.click();
		for (const letter of 'bench-01') {
			await page.keyboard.type(letter);
			await page.waitForTimeout(120);
		}
		await filter.fill('');
		await page.waitForTimeout(300);
		const durations = await page.evaluate(() => (window as unknown as { durations: number[] }).durations);
		waits.push(Math.max(8, ...durations));
	}
	const grid = page.getByRole('grid').first();
	await grid.hover();
	const frames: number[] = [];
	for (let round = 0; round < ROUNDS; round += 1) {
		const measuring = page.evaluate(
			() =>
				new Promise<number[]>((resolve) => {
					const gaps: number[] = [];
					let last = performance.now();
					const until = last + 2_000;
					const frame = (now: number) => {
						gaps.push(now - last);
						last = now;
						if (now < until) requestAnimationFrame(frame);
						else resolve(gaps.slice(1));
					};
					requestAnimationFrame(frame);
				}),
		);
		for (let step = 0; step < 60; step += 1) {
			await page.mouse.wheel(0, round % 2 ? -600 : 600);
			await page.waitForTimeout(25);
		}
		frames.push(median(await measuring));
	}
	await page.context().close();
	return [
		benchLine(
			'pages',
			waits,
			[100],
			'ms',
			`longest wait from a key to the next paint while filtering ${MAP_ROWS} rows, against the goal of 100 ms`,
		),
		benchLine('pages', frames, [17], 'ms', `median frame while scrolling ${MAP_ROWS} rows, against the goal of 17 ms`),
	];
}

async function usedBytes(client: CDPSession): Promise<number> {
	await client.send('HeapProfiler.collectGarbage');
	const { metrics } = await client.send('Performance.getMetrics');
	return metrics.find((metric) => metric.name === 'JSHeapUsedSize')?.value ?? 0;
}

/** A machine's page with live values, left open. */
async function memory(browser: Browser, product: ThrowawayProduct): Promise<BenchLine> {
	const page = await enter(browser, product);
	const client = await page.context().newCDPSession(page);
	await client.send('Performance.enable');
	await page.goto(`/${SITE}/tag-map`);
	await page.waitForTimeout(20_000);
	const before = await usedBytes(client);
	await page.waitForTimeout(MINUTES * 60_000);
	const after = await usedBytes(client);
	await page.context().close();
	return benchLine(
		'pages',
		[after / 1e6],
		[before / 1e6],
		'MB',
		`page memory after ${MINUTES} min of live values against that at the beginning`,
	);
}
