// Edge: cli. `npm run check`: format, lint, types, unit, architecture; needs no PostgreSQL.
import { allowTypeScript, ensureNodePackages, requireNode, runMain } from './bootstrap.js';

await runMain(async () => {
	requireNode();
	ensureNodePackages();
	await allowTypeScript();
	const { runTests } = await import('./test-steps.ts');
	process.exit(await runTests('check'));
});
