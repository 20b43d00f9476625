// Edge: cli. Sets up what the TypeScript part of `npm run admin` needs, then runs it.
import { allowTypeScript, ensureNodePackages, requireNode, runMain } from './bootstrap.js';

await runMain(async () => {
	requireNode();
	ensureNodePackages();
	await allowTypeScript();
	await import('./admin.ts');
});
