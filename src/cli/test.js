// Edge: cli. `npm test`: installs what the tests need, then runs all of them; ends with one line of counts.
import {
	allowTypeScript,
	ensureBuild,
	ensureDebianPackages,
	ensureNodePackages,
	hasFlag,
	requireNode,
	runMain,
} from './bootstrap.js';

await runMain(async () => {
	requireNode();
	ensureDebianPackages(['postgresql', 'chromium', 'mosquitto', 'mbpoll'], { install: !hasFlag('--no-install') });
	ensureNodePackages();
	ensureBuild();
	await allowTypeScript();
	const { runTests } = await import('./test-steps.ts');
	process.exit(await runTests('everything'));
});
