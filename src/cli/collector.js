// Edge: cli. `npm run collector`: one more collector against the same database as `npm start`.
import { spawn } from 'node:child_process';
import { allowTypeScript, ensureBuild, ensureNodePackages, Refusal, requireNode, runMain } from './bootstrap.js';

await runMain(async () => {
	requireNode();
	ensureNodePackages();
	const build = ensureBuild();
	await allowTypeScript();
	const { findRunningDatabase } = await import('./cluster.ts');
	const url = await findRunningDatabase();
	if (!url) throw new Refusal('No database found: start Millrace with `npm start` first, or set DATABASE_URL.');
	const child = spawn(process.execPath, ['--enable-source-maps', `${build}/processes/src/collector/main.js`], {
		stdio: 'inherit',
		env: { ...process.env, DATABASE_URL: url, MILLRACE_COLLECTOR: process.env.MILLRACE_COLLECTOR ?? `extra-${process.pid}` },
	});
	for (const signal of /** @type {const} */ (['SIGINT', 'SIGTERM'])) process.on(signal, () => child.kill(signal));
	child.on('exit', (code) => process.exit(code ?? 1));
});
