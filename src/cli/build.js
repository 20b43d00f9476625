// Edge: cli. `npm run build`: web, collector and simulators, always anew.
import { ensureBuild, ensureNodePackages, requireNode, runMain } from './bootstrap.js';

await runMain(async () => {
	requireNode();
	ensureNodePackages();
	ensureBuild({ force: true });
});
