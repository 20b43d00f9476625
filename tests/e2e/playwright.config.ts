import { defineConfig } from '@playwright/test';

/** Browser tests against the built product with its demo plant, on ports and in a data folder of their own. */
export default defineConfig({
	testDir: '.',
	testMatch: '**/*.e2e.ts',
	outputDir: '../../test-results',
	globalSetup: './start-product.ts',
	workers: 1,
	retries: 0,
	timeout: 60_000,
	expect: { timeout: 15_000 },
	reporter: [['list'], ['json']],
	use: {
		baseURL: process.env.E2E_ORIGIN,
		viewport: { width: 1_366, height: 768 },
		launchOptions: {
			executablePath: '/usr/bin/chromium',
			args: [
				'--no-sandbox',
				'--disable-gpu',
				'--disable-quic',
				'--no-first-run',
				'--disable-background-networking',
				'--disable-component-update',
				'--disable-sync',
			],
		},
	},
});
