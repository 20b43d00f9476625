import { expect, test, type Page } from '@playwright/test';
import { enterAs, makeKey, product } from './support.ts';

const TAG = 'B-1.MDE.H.VEL';

/** Puts the cursor on a cell of the one row that the filter leaves, types over it and waits until it is saved. */
async function type(page: Page, column: string, text: string): Promise<void> {
	const heads = await page.getByRole('columnheader').allTextContents();
	const index = heads.findIndex((head) => head.trim().toLowerCase().startsWith(column));
	expect(index).toBeGreaterThan(0);
	const cell = page.locator(`[role=gridcell][aria-colindex="${index + 1}"]`).first();
	await cell.click();
	await page.keyboard.type(text);
	await page.keyboard.press('Enter');
}

test('two people in one draft: what another changed meanwhile is kept, and the same cell is asked about', async ({ page }) => {
	const key = makeKey('second person', 'saltmere', 'map');
	const change = async (fields: Record<string, unknown>) => {
		const answer = await fetch(`${product().origin}/api/v1/sites/saltmere/map/draft`, {
			method: 'PATCH',
			headers: { authorization: `Bearer ${key}`, 'content-type': 'application/json' },
			body: JSON.stringify({ rows: [{ tag: TAG, ...fields }] }),
		});
		expect(answer.status).toBe(200);
	};
	const row = async () => {
		const answer = await fetch(`${product().origin}/api/v1/sites/saltmere/map/draft`, {
			headers: { authorization: `Bearer ${key}` },
		});
		const { rows } = (await answer.json()) as { rows: Record<string, unknown>[] };
		return rows.find((one) => one.tag === TAG) ?? {};
	};
	await enterAs(page, 'demo-saltmere-integrator');
	await page.goto(`/saltmere/tag-map?search=${TAG}`);
	await expect(page.getByRole('grid')).toContainText(TAG);

	await change({ high_range: 44 });
	await change({ low_range: 1 });
	await type(page, 'high', '45');
	const list = page.getByRole('alert', { name: 'Changed by two people' });
	await expect(list).toContainText('theirs 44, yours 45');
	// Theirs stands until somebody says otherwise, and what only they changed is kept.
	expect(await row()).toMatchObject({ high_range: 44, low_range: 1 });
	await list.getByRole('button', { name: 'Use mine' }).click();
	await expect(list).toHaveCount(0);
	await expect.poll(async () => (await row()).high_range).toBe(45);
	expect((await row()).low_range).toBe(1);
	await page.reload();
	await expect(page.getByRole('grid')).toContainText('45');
	// Left as it was found, for the tests after this one.
	await fetch(`${product().origin}/api/v1/sites/saltmere/map/draft`, {
		method: 'PUT',
		headers: { authorization: `Bearer ${key}`, 'content-type': 'application/json' },
		body: JSON.stringify({
			rows: (
				(await (
					await fetch(`${product().origin}/api/v1/sites/saltmere/map`, { headers: { authorization: `Bearer ${key}` } })
				).json()) as { rows: unknown[] }
			).rows,
		}),
	});
});
