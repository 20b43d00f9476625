// Edge: cli. Sets up what the TypeScript part of `npm run soak` needs, then runs it.
import { allowTypeScript, ensureDebianPackages, ensureNodePackages, requireNode, runMain } from './bootstrap.js';

await runMain(async () => {
	process.env.MILLRACE_LOG ??= 'silent';
	requireNode();
	ensureDebianPackages(['postgresql', 'mosquitto'], { install: true });
	ensureNodePackages();
	await allowTypeScript();
	await import('./soak.ts');
});
