// Edge: cli. May touch: a throwaway product, a browser, the pictures' folder. `npm run screenshots`: the pictures of the README, taken from the demo.
import { mkdirSync, statSync } from 'node:fs';
import { join } from 'node:path';
import { openBrowser } from './browser.ts';
import { startThrowawayProduct } from './throwaway-product.ts';

const FOLDER = '.github/pictures';
/** Long enough for the demo's first alarms and a trend that has a shape. */
const SETTLE_MS = 90_000;
const LOOK_MS = 2_500;

interface Picture {
	name: string;
	path: string;
	scheme: 'light' | 'dark';
	width: number;
	height: number;
}

const DESK = { width: 1_366, height: 768 };
const PICTURES: readonly Picture[] = [
	{ name: 'overview', path: '/saltmere', scheme: 'light', ...DESK },
	{ name: 'tag-map', path: '/saltmere/tag-map', scheme: 'light', ...DESK },
	{ name: 'trace', path: '/saltmere/tags/HL-3.MDE.H.VEL', scheme: 'light', ...DESK },
	{ name: 'machine', path: '/saltmere/machines/3', scheme: 'dark', ...DESK },
];

const product = await startThrowawayProduct();
try {
	console.error(`The demo runs; waiting ${SETTLE_MS / 1_000} s until there is something to see.`);
	await new Promise((resolve) => setTimeout(resolve, SETTLE_MS));
	mkdirSync(FOLDER, { recursive: true });
	const browser = await openBrowser();
	for (const { name, path, scheme, width, height } of PICTURES) {
		const context = await browser.newContext({
			baseURL: product.origin,
			colorScheme: scheme,
			viewport: { width, height },
			reducedMotion: 'reduce',
		});
		const page = await context.newPage();
		await page.goto('/sign-in');
		await page.locator('button[value="demo-saltmere-integrator"]').click();
		await page.waitForURL((url) => !url.pathname.includes('sign-in'));
		await page.goto(path);
		await page.waitForTimeout(LOOK_MS);
		const file = join(FOLDER, `${name}.png`);
		await page.screenshot({ path: file, animations: 'disabled', caret: 'hide' });
		console.log(`${file}  ${Math.round(statSync(file).size / 1_024)} kB`);
		await context.close();
	}
	await browser.close();
} finally {
	await product.remove();
}
