// Edge: cli. Sets up what the TypeScript part of `npm run bench` needs, then runs it.
import { allowTypeScript, ensureNodePackages, requireNode, runMain } from './bootstrap.js';

await runMain(async () => {
	// The lines of a benchmark stand alone on standard output.
	process.env.MILLRACE_LOG ??= 'silent';
	requireNode();
	ensureNodePackages();
	await allowTypeScript();
	await import('./bench.ts');
});
