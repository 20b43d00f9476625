// Edge: cli. May touch: child processes. The steps of `npm test` and `npm run check`, counted together.
import { spawn } from 'node:child_process';
import { mkdtempSync, readFileSync, rmSync } from 'node:fs';
import { tmpdir } from 'node:os';
import { join } from 'node:path';

interface Count {
	passed: number;
	failed: number;
}

/** Runs a program, shows what it prints, answers its exit code. Its own environment has no setting of a running installation. */
function run(program: string, args: string[], extra: Record<string, string> = {}): Promise<number> {
	const env: NodeJS.ProcessEnv = { ...process.env, TZ: 'UTC', ...extra };
	for (const name of ['DATABASE_URL', 'PORT', 'HOST', 'ORIGIN', 'MILLRACE_DATA', 'MILLRACE_PG_PORT', 'MILLRACE_DEMO'])
		if (!(name in extra)) delete env[name];
	return new Promise((resolve) => {
		const child = spawn(program, args, { env, stdio: ['ignore', 'inherit', 'inherit'] });
		child.on('error', (error) => {
			console.error(`${program}: ${error.message}`);
			resolve(1);
		});
		child.on('exit', (code) => resolve(code ?? 1));
	});
}

const bin = (name: string) => `node_modules/.bin/${name}`;

/** A step that passes or fails as one: it counts as one test. */
async function whole(title: string, program: string, args: string[]): Promise<Count> {
	console.log(`\n== ${title}`);
	const ok = (await run(program, args)) === 0;
	return { passed: ok ? 1 : 0, failed: ok ? 0 : 1 };
}

async function vitest(title: string, projects: string[], scratch: string): Promise<Count> {
	console.log(`\n== ${title}`);
	const out = join(scratch, `${projects.join('-')}.json`);
	const code = await run(bin('vitest'), [
		'run',
		'-c',
		'.config/vitest.config.ts',
		'--reporter=dot',
		'--reporter=json',
		`--outputFile.json=${out}`,
		...projects.flatMap((name) => ['--project', name]),
	]);
	return counted(code, () => {
		const report = JSON.parse(readFileSync(out, 'utf8')) as {
			numPassedTests: number;
			numFailedTests: number;
			numFailedTestSuites: number;
		};
		return { passed: report.numPassedTests, failed: report.numFailedTests };
	});
}

async function browser(scratch: string): Promise<Count> {
	console.log('\n== browser tests');
	const out = join(scratch, 'browser.json');
	const code = await run(bin('playwright'), ['test', '-c', 'tests/e2e/playwright.config.ts'], {
		PLAYWRIGHT_JSON_OUTPUT_NAME: out,
	});
	return counted(code, () => {
		const { stats } = JSON.parse(readFileSync(out, 'utf8')) as { stats: { expected: number; unexpected: number; flaky: number } };
		return { passed: stats.expected + stats.flaky, failed: stats.unexpected };
	});
}

/** A runner that fails without a failed test (a file that does not load, no report) still counts as a failure. */
function counted(code: number, read: () => Count): Count {
	try {
		const count = read();
		return code !== 0 && count.failed === 0 ? { ...count, failed: 1 } : count;
	} catch {
		return { passed: 0, failed: 1 };
	}
}

/** Runs the steps, prints one closing line, answers the exit code. */
export async function runTests(what: 'check' | 'everything'): Promise<number> {
	const startedAt = Date.now();
	const scratch = mkdtempSync(join(tmpdir(), 'millrace-counts-'));
	const counts: Count[] = [];
	try {
		await run(bin('svelte-kit'), ['sync']);
		counts.push(
			await whole('format', bin('prettier'), [
				'--config',
				'.config/prettier.json',
				'--ignore-path',
				'.config/prettierignore',
				'--check',
				'--log-level',
				'warn',
				'.',
			]),
		);
		counts.push(await whole('lint', bin('eslint'), ['-c', '.config/eslint.config.js', '.']));
		counts.push(
			await whole('types', bin('svelte-check'), ['--tsconfig', './tsconfig.json', '--threshold', 'error', '--output', 'human']),
		);
		counts.push(await vitest('unit and architecture', ['unit'], scratch));
		if (what === 'everything') {
			counts.push(await vitest('database', ['db'], scratch));
			counts.push(await vitest('wire', ['wire'], scratch));
			counts.push(await vitest('api', ['api'], scratch));
			counts.push(await vitest('ledger', ['ledger'], scratch));
			counts.push(await browser(scratch));
		}
	} finally {
		rmSync(scratch, { recursive: true, force: true });
	}
	const passed = counts.reduce((sum, count) => sum + count.passed, 0);
	const failed = counts.reduce((sum, count) => sum + count.failed, 0);
	console.log(`\ntook ${Math.round((Date.now() - startedAt) / 1000)} s`);
	console.log(`${passed} passed, ${failed} failed`);
	return failed === 0 && passed > 0 ? 0 : 1;
}
