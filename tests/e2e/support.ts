// Tests. What browser tests share: the product under test, its commands, ways in.
import { execFileSync } from 'node:child_process';
import { expect, type Page } from '@playwright/test';
import type { Product } from './start-product.ts';

/** The product that the global set-up started. */
export function product(): Product {
	const text = process.env.E2E_PRODUCT;
	if (!text) throw new Error('browser tests run through `npx playwright test -c tests/e2e/playwright.config.ts`');
	return JSON.parse(text) as Product;
}

/** Runs `npm run admin -- …` against the product; answers what it prints. */
export function admin(args: string[], input?: string): string {
	return execFileSync(process.execPath, ['src/cli/admin.js', ...args], {
		env: { ...process.env, ...product().env },
		encoding: 'utf8',
		...(input === undefined ? {} : { input }),
	});
}

/** Signs in as one of the demo people. */
export async function enterAs(page: Page, id: string): Promise<void> {
	await page.goto('/sign-in');
	await page.locator(`button[value="${id}"]`).click();
	await expect(page).not.toHaveURL(/sign-in/);
}

/** A key for scripts. */
export function makeKey(name: string, site: string, scopes: string): string {
	return (JSON.parse(admin(['key', 'add', '--name', name, '--site', site, '--scopes', scopes, '--json'])) as { key: string }).key;
}

/** GET of the API with a key. */
export async function ask<T>(path: string, key: string): Promise<T> {
	const answer = await fetch(`${product().origin}/api/v1${path}`, { headers: { authorization: `Bearer ${key}` } });
	if (!answer.ok) throw new Error(`${path}: ${answer.status} ${await answer.text()}`);
	return (await answer.json()) as T;
}

/** Errors that a page writes to the console; a page that works writes none. */
export function watchErrors(page: Page): string[] {
	const errors: string[] = [];
	page.on('console', (message) => {
		if (message.type() === 'error') errors.push(message.text());
	});
	page.on('pageerror', (error) => errors.push(error.message));
	return errors;
}
