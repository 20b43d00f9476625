// Edge: cli. The first step of `npm start` and `npm run dev`: what the TypeScript part needs, then that part.
import {
	allowTypeScript,
	ensureBuild,
	ensureDebianPackages,
	ensureNodePackages,
	hasFlag,
	Refusal,
	requireNode,
	runMain,
} from './bootstrap.js';

const KNOWN = ['--no-install', '--no-demo', '--dev', '--help'];

await runMain(async () => {
	const unknown = process.argv.slice(2).filter((arg) => !KNOWN.includes(arg));
	if (unknown.length > 0) throw new Refusal(`Unknown option ${unknown[0]}. Known: ${KNOWN.join(', ')}.`);
	if (hasFlag('--help')) {
		console.log(
			[
				'npm start -- [options]   installs what is missing, builds, and serves Millrace on one address',
				'  --no-demo      no demo plant and no simulators',
				'  --no-install   only print the commands that would install Debian packages',
				'Settings come from the environment; README.md lists them.',
			].join('\n'),
		);
		return;
	}
	requireNode();
	if (!process.env.DATABASE_URL) ensureDebianPackages(['postgresql'], { install: !hasFlag('--no-install') });
	ensureNodePackages();
	const build = hasFlag('--dev') ? null : ensureBuild();
	await allowTypeScript();
	const { start } = await import('./start.ts');
	await start({ demo: !hasFlag('--no-demo'), build });
});
