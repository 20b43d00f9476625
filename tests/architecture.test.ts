// Tests. Reads every import and holds it against the folder rules; DEVELOPERS.md says them in words.
import { existsSync, readFileSync, readdirSync } from 'node:fs';
import { dirname, join, relative, resolve } from 'node:path';
import { describe, expect, it } from 'vitest';

const ROOT = resolve(import.meta.dirname, '..');

/** Packages that only compute: no I/O, no clock of their own. */
const PURE_PACKAGES = ['zod', 'papaparse', '@lhncbc/ucum-lhc', 'fast-check', 'vitest'];
const PROTOCOL_PACKAGES = ['node-opcua', 'modbus-serial', 'mqtt', 'aedes', 'node-opcua-client', 'serialport', 'protobufjs'];
const DATABASE_PACKAGES = ['pg', 'pg-copy-streams', 'drizzle-orm', 'libsql'];

/** Folders whose files are pure whatever their first line says. */
const PURE_FOLDERS = [
	'src/lib/domain/',
	'src/lib/pipeline/decode/',
	'src/lib/pipeline/normalize/',
	'src/lib/pipeline/evaluate/',
	'src/lib/pipeline/aggregate/',
];

interface FolderRule {
	folder: string;
	/** Why, in the failure's own words. */
	rule: string;
	forbidden: (target: string) => boolean;
}

const under =
	(...folders: string[]) =>
	(target: string) =>
		folders.some((folder) => target.startsWith(folder));
const packages =
	(...names: string[]) =>
	(target: string) =>
		names.some((name) => target === name || target.startsWith(`${name}/`));

const RULES: FolderRule[] = [
	{
		folder: 'src/lib/pipeline/sources/',
		rule: 'sources bring values in: no database, tag map server, store or feeds',
		forbidden: (t) =>
			packages(...DATABASE_PACKAGES)(t) ||
			under('src/lib/server/', 'src/lib/pipeline/store/', 'src/lib/pipeline/feeds/', 'src/lib/components/', 'src/routes/')(t),
	},
	{
		folder: 'src/lib/pipeline/store/',
		rule: 'the store knows no protocol, page or component',
		forbidden: (t) =>
			packages(...PROTOCOL_PACKAGES)(t) || under('src/lib/pipeline/sources/', 'src/lib/components/', 'src/routes/')(t),
	},
	{
		folder: 'src/lib/pipeline/feeds/',
		rule: 'feeds never reach sources, pages or components',
		forbidden: under('src/lib/pipeline/sources/', 'src/lib/components/', 'src/routes/'),
	},
	{
		folder: 'src/lib/components/',
		rule: 'components use domain, decode, normalize and each other: never server, store, sources, feeds or a package with I/O',
		forbidden: (t) =>
			packages(...DATABASE_PACKAGES, ...PROTOCOL_PACKAGES, 'pino', 'nodemailer')(t) ||
			under(
				'src/lib/server/',
				'src/lib/pipeline/store/',
				'src/lib/pipeline/sources/',
				'src/lib/pipeline/feeds/',
				'src/routes/',
			)(t) ||
			t.startsWith('node:'),
	},
	{
		folder: 'src/routes/',
		rule: 'routes are thin: no database package, no source, no protocol package',
		forbidden: (t) =>
			packages(...DATABASE_PACKAGES, ...PROTOCOL_PACKAGES)(t) ||
			under('src/lib/pipeline/sources/', 'src/collector/', 'src/cli/', 'simulators/', 'tests/')(t),
	},
	{
		folder: 'src/lib/server/',
		rule: 'server functions know no page, component or collector',
		forbidden: under('src/routes/', 'src/lib/components/', 'src/collector/', 'src/cli/', 'simulators/', 'tests/'),
	},
	{
		folder: 'src/collector/',
		rule: 'the collector knows no page or component',
		forbidden: under('src/routes/', 'src/lib/components/', 'simulators/', 'tests/'),
	},
	{
		folder: 'simulators/',
		rule: "simulators use domain words and protocol servers, never the product's server or store",
		forbidden: under('src/lib/server/', 'src/lib/pipeline/store/', 'src/routes/', 'src/collector/', 'tests/'),
	},
];

function filesIn(folder: string): string[] {
	const path = join(ROOT, folder);
	if (!existsSync(path)) return [];
	return readdirSync(path, { recursive: true, encoding: 'utf8' })
		.filter((name) => /\.(ts|js|svelte)$/.test(name))
		.map((name) => join(folder, name));
}

/** Import targets of a file: package names as they are, own files relative to the root. */
function importsOf(file: string, { types }: { types: boolean } = { types: true }): string[] {
	const whole = readFileSync(join(ROOT, file), 'utf8');
	// Types leave nothing behind when the code runs.
	const text = types ? whole : whole.replace(/(^|\n)\s*(import|export) type\s[^;]*;/g, '\n');
	const found = [
		...text.matchAll(
			/(?:^|\n)\s*(?:import|export)\s[^'"]*?from\s*['"]([^'"]+)['"]|(?:^|\n)\s*import\s*['"]([^'"]+)['"]|import\(\s*['"]([^'"]+)['"]\s*\)/g,
		),
	];
	return found.map((match) => {
		const target = match[1] ?? match[2] ?? match[3] ?? '';
		if (target.startsWith('#lib/')) return `src/lib/${target.slice(5)}`;
		if (target.startsWith('#simulators/')) return `simulators/${target.slice(12)}`;
		if (target.startsWith('.')) return relative(ROOT, resolve(ROOT, dirname(file), target));
		return target;
	});
}

function isPure(file: string): boolean {
	if (PURE_FOLDERS.some((folder) => file.startsWith(folder))) return true;
	return existsSync(join(ROOT, file)) && readFileSync(join(ROOT, file), 'utf8').startsWith('// Pure.');
}

const allFiles = [...filesIn('src'), ...filesIn('simulators')];

describe('the folder rules', () => {
	it('find the files they are about', () => {
		expect(allFiles.length).toBeGreaterThan(40);
	});

	it('pure files import only pure files and packages that only compute', () => {
		const broken: string[] = [];
		for (const file of allFiles.filter((name) => isPure(name) && !name.endsWith('.test.ts'))) {
			for (const target of importsOf(file, { types: false })) {
				const own = target.startsWith('src/') || target.startsWith('simulators/');
				if (own ? !isPure(target) : !packages(...PURE_PACKAGES)(target))
					broken.push(`${file} imports ${target}: pure files import only pure ones`);
			}
			const text = readFileSync(join(ROOT, file), 'utf8').replace(/\/\*[\s\S]*?\*\/|\/\/.*$/gm, '');
			for (const forbidden of ['Date.now(', 'Math.random(', 'process.env', 'performance.now(', 'setTimeout(', 'new Date()']) {
				if (text.includes(forbidden)) broken.push(`${file} uses ${forbidden}…): pure files have no clock, chance or environment`);
			}
		}
		expect(broken).toEqual([]);
	});

	it.each(RULES)('$folder: $rule', ({ folder, rule, forbidden }) => {
		const broken = allFiles
			.filter((file) => file.startsWith(folder) && !file.endsWith('.test.ts'))
			.flatMap((file) =>
				importsOf(file)
					.filter(forbidden)
					.map((target) => `${file} imports ${target}: ${rule}`),
			);
		expect(broken).toEqual([]);
	});

	it('only the database folder opens a connection', () => {
		const broken = allFiles
			.filter((file) => !file.startsWith('src/lib/server/db/') && !file.startsWith('src/cli/') && !file.endsWith('.test.ts'))
			.filter((file) => /new (?:pg\.)?(?:Pool|Client)\(/.test(readFileSync(join(ROOT, file), 'utf8')));
		expect(broken).toEqual([]);
	});

	it('every TypeScript file outside routes and tests says its rule in its first line', () => {
		const broken = allFiles
			.filter(
				(file) => /\.ts$/.test(file) && !file.endsWith('.test.ts') && !file.endsWith('.d.ts') && !file.startsWith('src/routes/'),
			)
			.filter((file) => !/^\/\/ (Pure\.|Edge: |Schema\.|Interface)/.test(readFileSync(join(ROOT, file), 'utf8')));
		expect(broken).toEqual([]);
	});

	it('nothing mocks our own modules', () => {
		const tests = [...filesIn('tests'), ...allFiles.filter((file) => file.endsWith('.test.ts'))];
		const word = ['vi', 'mock('].join('.');
		expect(tests.filter((file) => readFileSync(join(ROOT, file), 'utf8').includes(word))).toEqual([]);
	});

	it('no component or page names a raw colour', () => {
		const broken = allFiles
			.filter((file) => file.endsWith('.svelte'))
			.filter((file) => /#[0-9a-fA-F]{6}\b|\brgba?\(|\bhsla?\(|\boklch\(/.test(readFileSync(join(ROOT, file), 'utf8')));
		expect(broken).toEqual([]);
	});
});
