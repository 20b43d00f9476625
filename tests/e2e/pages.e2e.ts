import { expect, test } from '@playwright/test';
import { readFileSync } from 'node:fs';
import { enterAs, watchErrors } from './support.ts';

const AXE = readFileSync('node_modules/axe-core/axe.min.js', 'utf8');
const PAGES = [
	'',
	'/sources',
	'/tag-map',
	'/machines',
	'/machines/3',
	'/alarms',
	'/alarms?state=all',
	'/limits',
	'/tags/HL-3.MDE.H.VEL',
	'/keys',
	'/audit',
];
const SIZES = [
	{ width: 1_366, height: 768 },
	{ width: 390, height: 844 },
];

for (const scheme of ['light', 'dark'] as const) {
	test(`every page at ${scheme}: no error, no finding of axe, no sideways scroll at both sizes`, async ({ browser }) => {
		test.setTimeout(150_000);
		const context = await browser.newContext({
			colorScheme: scheme,
			viewport: SIZES[0] ?? null,
			bypassCSP: false,
			...(process.env.E2E_ORIGIN ? { baseURL: process.env.E2E_ORIGIN } : {}),
		});
		const page = await context.newPage();
		const errors = watchErrors(page);
		await enterAs(page, 'demo-saltmere-integrator');
		const findings: string[] = [];
		for (const path of PAGES) {
			await page.goto(`/saltmere${path}`);
			await expect(page.getByRole('heading').first()).toBeVisible();
			await page.waitForTimeout(600);
			await page.evaluate(AXE);
			const found = await page.evaluate(async () => {
				const axe = (
					window as unknown as {
						axe: { run(options: unknown): Promise<{ violations: { id: string; nodes: { target: unknown[] }[] }[] }> };
					}
				).axe;
				const { violations } = await axe.run({ resultTypes: ['violations'] });
				return violations.map(
					(violation) =>
						`${violation.id}: ${violation.nodes
							.slice(0, 3)
							.map((node) => String(node.target[0]))
							.join(', ')}`,
				);
			});
			findings.push(...found.map((text) => `${path || '/'} ${text}`));
			for (const size of SIZES) {
				await page.setViewportSize(size);
				await page.waitForTimeout(150);
				const isWide = await page.evaluate(() => document.documentElement.scrollWidth > window.innerWidth);
				if (isWide) findings.push(`${path || '/'} scrolls sideways at ${size.width}`);
			}
			await page.setViewportSize(SIZES[0] ?? { width: 1_366, height: 768 });
		}
		expect(findings).toEqual([]);
		expect(errors).toEqual([]);
		await context.close();
	});
}

for (const role of ['integrator', 'controls', 'maintenance', 'analyst', 'viewer']) {
	test(`the first page of ${role} opens, and offers only what the role may`, async ({ page }) => {
		const errors = watchErrors(page);
		await enterAs(page, `demo-saltmere-${role}`);
		await expect(page.getByRole('heading', { name: 'Needs somebody' })).toBeVisible();
		await page.goto('/saltmere/sources');
		await expect(page.getByRole('link', { name: 'Add a source' })).toHaveCount(role === 'integrator' ? 1 : 0);
		await page.goto('/saltmere/alarms');
		await expect(page.getByRole('heading', { name: 'Alarms' })).toBeVisible();
		if (role === 'viewer') await expect(page.getByRole('button', { name: 'Acknowledge' })).toHaveCount(0);
		expect(errors).toEqual([]);
	});
}

test('a page without a session leads to the sign-in form', async ({ page }) => {
	await page.goto('/saltmere/sources');
	await expect(page).toHaveURL(/\/sign-in/);
	await expect(page.getByLabel('Password')).toBeVisible();
	await expect(page.getByText(/not a protection or safety system/i)).toBeVisible();
});
