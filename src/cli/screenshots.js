// Edge: cli. Sets up what the TypeScript part of `npm run screenshots` needs, then runs it.
import { allowTypeScript, ensureDebianPackages, ensureNodePackages, requireNode, runMain } from './bootstrap.js';

await runMain(async () => {
	requireNode();
	ensureDebianPackages(['postgresql', 'chromium'], { install: true });
	ensureNodePackages();
	await allowTypeScript();
	await import('./screenshots.ts');
});
