// Edge: cli. Plain JavaScript without dependencies: it runs before anything is installed.
import { spawnSync } from 'node:child_process';
import { createHash } from 'node:crypto';
import { existsSync, mkdirSync, readFileSync, readdirSync, rmSync, statSync, writeFileSync } from 'node:fs';
import { dirname, join, resolve } from 'node:path';
import { fileURLToPath } from 'node:url';

export const ROOT = resolve(dirname(fileURLToPath(import.meta.url)), '../..');

/** A failure that is the user's to mend: shown as it is, without a stack. */
export class Refusal extends Error {}

/** Runs `main` and turns a refusal into its lines and exit code 1. @param {() => Promise<void>} main */
export async function runMain(main) {
	process.chdir(ROOT);
	try {
		await main();
	} catch (error) {
		if (!(error instanceof Refusal)) throw error;
		console.error(error.message);
		process.exit(1);
	}
}

/** Node 20 is what the locked packages were tried with. */
export function requireNode() {
	const [major = 0, minor = 0] = process.versions.node.split('.').map(Number);
	if (major !== 20 || minor < 19) {
		throw new Refusal(`Node ${process.versions.node} found, 20.19 or a later 20 expected: install Node 20, then try again.`);
	}
}

/** Folder of the newest PostgreSQL's programs, or null. @returns {string | null} */
export function findPostgres() {
	const root = '/usr/lib/postgresql';
	if (!existsSync(root)) return null;
	const versions = readdirSync(root).sort((a, b) => Number(b) - Number(a));
	for (const version of versions) {
		const bin = join(root, version, 'bin');
		if (existsSync(join(bin, 'initdb')) && existsSync(join(bin, 'postgres'))) return bin;
	}
	return null;
}

/** What Debian must bring, and the file that shows it is there. @type {Record<string, () => boolean>} */
const DEBIAN = {
	postgresql: () => findPostgres() !== null,
	chromium: () => existsSync('/usr/bin/chromium'),
	mosquitto: () => existsSync('/usr/sbin/mosquitto'),
	mbpoll: () => existsSync('/usr/bin/mbpoll'),
};

/**
 * Installs the Debian packages that are missing, or says how.
 * @param {string[]} names
 * @param {{ install: boolean }} options
 */
export function ensureDebianPackages(names, { install }) {
	const missing = names.filter((name) => !DEBIAN[name]?.());
	if (missing.length === 0) return;
	const isRoot = process.getuid?.() === 0;
	const commands = [
		...(missing.includes('postgresql')
			? ['mkdir -p /etc/postgresql-common', "echo 'create_main_cluster = false' > /etc/postgresql-common/createcluster.conf"]
			: []),
		'apt-get update',
		`apt-get install -y --no-install-recommends ${missing.join(' ')}`,
	];
	if (!install) {
		throw new Refusal(
			[`Debian packages missing: ${missing.join(', ')}. As root:`, ...commands.map((line) => `  ${line}`)].join('\n'),
		);
	}
	if (!existsSync('/usr/bin/apt-get')) {
		throw new Refusal(`Missing: ${missing.join(', ')}, and no apt-get to install it with. Install it by hand, then try again.`);
	}
	const sudo = isRoot ? [] : ['sudo', '-n'];
	if (!isRoot && spawnSync('sudo', ['-n', 'true'], { stdio: 'ignore' }).status !== 0) {
		throw new Refusal(
			[
				`Debian packages missing: ${missing.join(', ')}, and only root may install them. As root:`,
				...commands.map((line) => `  ${line}`),
			].join('\n'),
		);
	}
	console.error(`Installing Debian packages: ${missing.join(', ')} (once; a minute or two)`);
	for (const line of commands) {
		const [program = 'sh', ...args] = [...sudo, 'env', 'DEBIAN_FRONTEND=noninteractive', 'RUNLEVEL=1', 'sh', '-c', line];
		const result = spawnSync(program, args, { stdio: ['ignore', 'pipe', 'pipe'], encoding: 'utf8', maxBuffer: 64 * 1024 * 1024 });
		if (result.status !== 0) {
			const tail = `${result.stdout}\n${result.stderr}`.trim().split('\n').slice(-4).join('\n  ');
			throw new Refusal(`"${line}" failed. Check the network and Debian's package sources, then try again.\n  ${tail}`);
		}
	}
	const still = missing.filter((name) => !DEBIAN[name]?.());
	if (still.length > 0) throw new Refusal(`Installed, but still not found: ${still.join(', ')}.`);
}

/** Hash of a file's text, or 'none'. @param {string} path */
function hashOf(path) {
	return existsSync(path) ? createHash('sha256').update(readFileSync(path)).digest('hex') : 'none';
}

/** Installs the node packages from the lock when they are missing or the lock changed. */
export function ensureNodePackages() {
	const stamp = join(ROOT, 'node_modules/.millrace-lock');
	const wanted = hashOf(join(ROOT, 'package-lock.json'));
	if (existsSync(stamp) && readFileSync(stamp, 'utf8') === wanted) return;
	console.error('Installing node packages from the lock (once; about a minute)');
	const result = spawnSync('npm', ['ci', '--no-audit', '--no-fund', '--loglevel=error'], {
		cwd: ROOT,
		stdio: ['ignore', 'pipe', 'pipe'],
		encoding: 'utf8',
	});
	if (result.status !== 0) {
		const tail = `${result.stdout}\n${result.stderr}`.trim().split('\n').slice(-4).join('\n  ');
		throw new Refusal(`"npm ci" failed. Check the network and that this folder can be written, then try again.\n  ${tail}`);
	}
	writeFileSync(stamp, wanted);
}

const BUILD_INPUTS = [
	'src',
	'static',
	'svelte.config.js',
	'vite.config.ts',
	'tailwind.config.ts',
	'package-lock.json',
	'simulators',
];

/** Newest-content fingerprint of everything the build reads: names, sizes and times. */
function buildFingerprint() {
	const hash = createHash('sha256');
	/** @param {string} path */
	const visit = (path) => {
		const stat = statSync(path, { throwIfNoEntry: false });
		if (!stat) return;
		if (stat.isDirectory()) {
			for (const name of readdirSync(path).sort()) visit(join(path, name));
		} else if (!path.endsWith('.test.ts')) {
			hash.update(`${path} ${stat.size} ${Math.round(stat.mtimeMs)}\n`);
		}
	};
	for (const input of BUILD_INPUTS) visit(join(ROOT, input));
	return hash.digest('hex');
}

/** Builds kept beside the newest, since a running start may still serve from one of them. */
const KEPT_BUILDS = 3;

/**
 * Builds web, collector and simulators when their sources changed; each state of the sources has a folder of its own, so that
 * a build never changes files under a product that runs. Answers the folder.
 * @returns {string}
 */
export function ensureBuild({ force = false } = {}) {
	const name = buildFingerprint().slice(0, 16);
	const folder = join('build', name);
	const stamp = join(ROOT, folder, '.stamp');
	if (!force && existsSync(stamp)) return folder;
	console.error('Building (when sources changed; about half a minute)');
	rmSync(join(ROOT, folder), { recursive: true, force: true });
	for (const [program, args] of /** @type {[string, string[]][]} */ ([
		['node_modules/.bin/vite', ['build', '--logLevel', 'error']],
		[
			'node_modules/.bin/esbuild',
			['src/collector/main.ts', 'simulators/main.ts', ...BUNDLE_FLAGS, `--outdir=${folder}/processes`],
		],
		[process.execPath, ['src/cli/third-parties.js', `${folder}/client/third-parties.txt`]],
	])) {
		const result = spawnSync(program, args, {
			cwd: ROOT,
			stdio: ['ignore', 'pipe', 'pipe'],
			encoding: 'utf8',
			env: { ...process.env, MILLRACE_BUILD: folder },
		});
		if (result.status !== 0) throw new Refusal(`Building failed at ${program}:\n${result.stdout}${result.stderr}`);
	}
	mkdirSync(join(ROOT, folder), { recursive: true });
	writeFileSync(stamp, name);
	const builds = readdirSync(join(ROOT, 'build'))
		.map((entry) => ({ entry, at: statSync(join(ROOT, 'build', entry)).mtimeMs }))
		.sort((a, b) => b.at - a.at);
	for (const { entry } of builds.slice(KEPT_BUILDS)) rmSync(join(ROOT, 'build', entry), { recursive: true, force: true });
	return folder;
}

/** The collector and the simulators as single files; packages stay outside, since some are native. */
const BUNDLE_FLAGS = [
	'--bundle',
	'--platform=node',
	'--target=node20',
	'--format=esm',
	'--packages=external',
	'--sourcemap',
	'--log-level=error',
	'--outbase=.',
];

/** Lets this process import TypeScript from here on. */
export async function allowTypeScript() {
	const { register } = await import('tsx/esm/api');
	register();
}

/** True when a flag such as `--no-demo` stands among the arguments. @param {string} name */
export function hasFlag(name) {
	return process.argv.slice(2).includes(name);
}
