// Edge: cli. May touch: server functions, child processes. No rule of its own. Finds and runs one admin command.
import { createPool, type Pool } from '#lib/server/db/pool.ts';
import { Refusal } from '../bootstrap.js';
import { findRunningDatabase } from '../cluster.ts';
import { backup, restore } from './backup.ts';
import { readArguments, usageOf, type Command } from './command.ts';
import { doctor } from './doctor.ts';
import { keyAdd, keyRevoke } from './key.ts';
import { siteAdd } from './site.ts';
import { userAdd, userPasswd } from './user.ts';

const COMMANDS: Readonly<Record<string, Command>> = {
	'user add': userAdd,
	'user passwd': userPasswd,
	'key add': keyAdd,
	'key revoke': keyRevoke,
	'site add': siteAdd,
	backup,
	restore,
	doctor,
};

function overview(): string {
	const lines = Object.entries(COMMANDS).map(([name, { about }]) => `  ${name.padEnd(12)} ${about}`);
	return ['Usage: npm run admin -- COMMAND [options]', ...lines, 'Each command takes --json and --help.'].join('\n');
}

/** Runs the command that the arguments name. Throws a `Refusal` with the usage when they name none. */
export async function runAdmin(args: readonly string[]): Promise<void> {
	const [first = '', second = ''] = args;
	const name = Object.hasOwn(COMMANDS, `${first} ${second}`) ? `${first} ${second}` : first;
	const command = COMMANDS[name];
	if (!command) {
		if (args.includes('--help') || first === 'help') {
			console.log(overview());
			return;
		}
		throw new Refusal(
			first === '' || first.startsWith('-')
				? overview()
				: `There is no command "${args.filter((arg) => !arg.startsWith('-')).join(' ')}".\n${overview()}`,
		);
	}
	const own = args.slice(name.split(' ').length);
	if (own.includes('--help')) {
		console.log(usageOf(name, command));
		return;
	}
	const { isJson, ...context } = readArguments(name, command, own);
	let pool: Pool | undefined;
	try {
		const answer = await command.run({
			...context,
			async pool() {
				if (pool) return pool;
				const url = await findRunningDatabase();
				if (!url) throw new Refusal('No database answers: start Millrace with npm start, or set DATABASE_URL, then try again.');
				pool = createPool(url, { name: 'millrace-admin', max: 2 });
				return pool;
			},
		});
		console.log(isJson ? JSON.stringify(answer.json) : answer.text);
		if (answer.isBad) process.exitCode = 1;
	} finally {
		await pool?.end();
	}
}
