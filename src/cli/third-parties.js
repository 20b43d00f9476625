// Edge: cli. Writes the notice of third parties: every package that is shipped or needed at run time, with its licence text.
import { existsSync, mkdirSync, readFileSync, readdirSync, writeFileSync } from 'node:fs';
import { dirname, join } from 'node:path';

const out = process.argv[2] ?? 'build/client/third-parties.txt';
/** @type {{ packages: Record<string, { version?: string, license?: string, dev?: boolean, optional?: boolean }> }} */
const lock = JSON.parse(readFileSync('package-lock.json', 'utf8'));

// Built into the pages although they are development dependencies for npm.
const BUILT_IN = [
	'svelte',
	'@sveltejs/kit',
	'tailwindcss',
	'@fontsource-variable/archivo',
	'@fontsource-variable/martian-mono',
	'@lucide/svelte',
	'bits-ui',
	'uplot',
	'@tanstack/svelte-query',
	'@tanstack/query-core',
	'@tanstack/svelte-table',
	'@tanstack/svelte-virtual',
	'@tanstack/virtual-core',
	'@internationalized/date',
	'sveltekit-superforms',
];

const parts = [];
for (const [path, entry] of Object.entries(lock.packages)) {
	if (!path) continue;
	const name = path.slice(path.lastIndexOf('node_modules/') + 'node_modules/'.length);
	if (entry.dev && !BUILT_IN.includes(name)) continue;
	if (!existsSync(path)) continue; // built for another machine
	const file = readdirSync(path).find((entryName) => /^(licen[cs]e|copying|ofl)/i.test(entryName));
	const notice = readdirSync(path).find((entryName) => /^notice/i.test(entryName));
	const text = [file, notice]
		.filter((entryName) => entryName !== undefined)
		.map((entryName) => readFileSync(join(path, entryName), 'utf8').trim());
	parts.push(
		`${name} ${entry.version ?? ''}\nLicence: ${entry.license ?? 'see below'}\n\n${text.join('\n\n') || '(no licence file in the package)'}\n`,
	);
}
mkdirSync(dirname(out), { recursive: true });
writeFileSync(
	out,
	`Millrace is under the Apache License 2.0. It is made with the packages below, each under its own licence.\n\n${[...new Set(parts)].join(`\n${'-'.repeat(78)}\n\n`)}`,
);
