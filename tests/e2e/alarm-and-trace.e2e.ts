import { readFileSync } from 'node:fs';
import { expect, test } from '@playwright/test';
import { enterAs, watchErrors } from './support.ts';

test('a maintenance person finds an alarm, reads what to do, acknowledges it, and keeps it quiet for a reason', async ({
	page,
}) => {
	const errors = watchErrors(page);
	await enterAs(page, 'demo-saltmere-maintenance');
	await page.goto('/saltmere/alarms');
	// The battery that runs down is under its limit from the first hour on.
	await page.getByRole('searchbox', { name: 'Name' }).fill('LL-4.PDE.BATT');
	await expect(page).toHaveURL(/search=LL-4.PDE.BATT/);
	await page.getByRole('button', { name: 'LL-4.PDE.BATT' }).first().click();
	const sheet = page.getByRole('complementary', { name: 'LL-4.PDE.BATT' });
	for (const heading of ['What it means', 'What to do', 'How long there is', 'Whom to call', 'The last times'])
		await expect(sheet.getByRole('heading', { name: heading })).toBeVisible();
	await expect(sheet.getByText('the value is at or below 20 %')).toBeVisible();
	await sheet.getByLabel('Note').fill('battery ordered');
	await sheet.getByRole('button', { name: 'Acknowledge' }).click();
	await expect(sheet.getByText('battery ordered')).toBeVisible();

	await sheet.getByRole('button', { name: 'Shelve …' }).click();
	await sheet.getByRole('button', { name: 'Shelve', exact: true }).click();
	await expect(sheet.getByText('others will ask')).toBeVisible();
	await sheet.getByLabel('Reason').fill('spare arrives tomorrow');
	await sheet.getByRole('button', { name: 'Shelve', exact: true }).click();
	await expect(sheet.getByText('spare arrives tomorrow')).toBeVisible();
	await expect(page.getByRole('row', { name: /LL-4.PDE.BATT/ }).first()).toContainText('shelved');
	await sheet.getByRole('button', { name: 'End shelving' }).click();
	await expect(sheet.getByRole('button', { name: 'Shelve …' })).toBeVisible();

	await sheet.getByRole('link', { name: 'Machine LL-4' }).click();
	await expect(page).toHaveURL(/machines\/\d+$/);
	await expect(page.getByRole('heading', { name: 'LL-4', exact: true })).toBeVisible();
	await page.getByRole('button', { name: 'Out of service …' }).click();
	await page.getByLabel('Reason').fill('overhaul');
	await page.getByRole('button', { name: 'Take out of service' }).click();
	await expect(page.getByText('overhaul. Judged and recorded, but nobody is called.')).toBeVisible();
	await page.getByRole('button', { name: 'Return to service' }).click();
	await expect(page.getByRole('button', { name: 'Out of service …' })).toBeVisible();
	expect(errors).toEqual([]);
});

test('an analyst traces a point of the trend, finds what a receiver did to it, and saves what is shown', async ({ page }) => {
	const errors = watchErrors(page);
	await enterAs(page, 'demo-saltmere-analyst');
	await page.goto('/saltmere/tags/HL-3.MDE.H.VEL');
	const plot = page.locator('.u-over');
	await expect(plot).toBeVisible();
	const box = await plot.boundingBox();
	if (!box) throw new Error('the trend has no size');
	await page.mouse.click(box.x + box.width / 2, box.y + box.height / 2);
	await expect(page).toHaveURL(/[?&]at=/);
	await expect(page.getByRole('button', { name: 'Trace the latest' })).toBeVisible();
	const trace = page.getByRole('region', { name: 'Trace' });
	const converted = trace.getByRole('button', { name: /^Convert/ });
	await expect(converted).toContainText(/\d\.\d/);
	const figure = Number(/\d+\.\d+/.exec((await converted.locator('.figure').textContent()) ?? '')?.[0]);
	// The peak of a sine is √2 times its rms.
	await trace.getByLabel('Receiver shows').fill((figure * Math.SQRT2).toFixed(2));
	await expect(trace.getByText('read as peak instead of rms').first()).toBeVisible();

	await page.getByRole('group', { name: /Trend of/ }).focus();
	await page.keyboard.press('ArrowUp');
	await expect(page).toHaveURL(/from=.*to=/);
	const [download] = await Promise.all([
		page.waitForEvent('download'),
		page.getByRole('button', { name: 'Save as CSV' }).click(),
	]);
	const lines = readFileSync(await download.path(), 'utf8').split('\r\n');
	expect(lines[0]).toBe('tag,from,min,max,mean,readings,unit,worst_quality');
	expect(lines[1]).toContain('HL-3.MDE.H.VEL');
	await page.getByRole('button', { name: 'to now' }).click();
	await expect(page).not.toHaveURL(/from=/);
	expect(errors).toEqual([]);
});

test('an integrator makes a machine with its shape, and changes it', async ({ page }) => {
	await enterAs(page, 'demo-saltmere-integrator');
	await page.goto('/saltmere/machines');
	await page.getByRole('button', { name: 'New machine' }).click();
	const dialog = page.getByRole('dialog', { name: 'New machine' });
	await dialog.getByRole('button', { name: 'Create' }).click();
	await expect(dialog.getByText('a name, unique in the site')).toBeVisible();
	await dialog.getByLabel('Name').first().fill('HL-9');
	await dialog.getByLabel('Area').fill('High Lift');
	await dialog.getByLabel('Power').fill('160');
	await dialog.getByRole('button', { name: 'Add a point' }).click();
	await dialog.getByLabel('Name').nth(1).fill('MDE');
	await dialog.getByRole('button', { name: 'Create' }).click();
	await expect(page).toHaveURL(/machines\/\d+$/);
	await expect(page.getByText('pump set, 160 kW')).toBeVisible();
	await page.getByRole('button', { name: 'Edit' }).click();
	await page.getByRole('dialog', { name: 'Change HL-9' }).getByLabel('Power').fill('200');
	await page.getByRole('button', { name: 'Save' }).click();
	await expect(page.getByText('pump set, 200 kW')).toBeVisible();
});
