import { resolve } from 'node:path';
import { defineConfig } from 'vitest/config';

const root = resolve(import.meta.dirname, '..');

/** unit: pure code beside its test. db, wire, api: the real PostgreSQL and real sockets, in `tests/`. ledger: the whole product under faults. */
export default defineConfig({
	root,
	test: {
		projects: [
			{
				root,
				test: {
					name: 'unit',
					include: ['src/**/*.test.ts', 'tests/architecture.test.ts', 'simulators/**/*.test.ts'],
					environment: 'node',
				},
			},
			{
				root,
				test: {
					name: 'db',
					include: ['tests/db/**/*.test.ts'],
					globalSetup: ['tests/support/global-cluster.ts'],
					testTimeout: 60_000,
					hookTimeout: 60_000,
				},
			},
			{
				root,
				test: {
					name: 'wire',
					include: ['tests/wire/**/*.test.ts', 'tests/contract/**/*.test.ts'],
					testTimeout: 60_000,
					hookTimeout: 60_000,
				},
			},
			{
				root,
				test: {
					name: 'ledger',
					include: ['tests/ledger/**/*.test.ts'],
					testTimeout: 60_000,
					hookTimeout: 60_000,
				},
			},
			{
				root,
				test: {
					name: 'api',
					include: ['tests/api/**/*.test.ts'],
					globalSetup: ['tests/support/global-cluster.ts'],
					testTimeout: 60_000,
					hookTimeout: 60_000,
				},
			},
		],
	},
});
