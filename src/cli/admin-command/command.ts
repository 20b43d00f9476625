// Edge: cli. May touch: nothing but its arguments. What an admin command is.
import { parseArgs, type ParseArgsConfig } from 'node:util';
import type { Pool } from '#lib/server/db/pool.ts';
import { Refusal } from '../bootstrap.js';

export interface CommandContext {
	/** Values of the command's options; repeated ones as given, in order. */
	options: Readonly<Record<string, string | undefined>>;
	flags: ReadonlySet<string>;
	/** Words after the command's name. */
	words: readonly string[];
	/** The running database; opened on first use. Throws a `Refusal` when there is none. */
	pool(): Promise<Pool>;
}

/** What a command answers: for people a text, for scripts a JSON value. `isBad` makes the exit code 1. */
export interface Answer {
	text: string;
	json: unknown;
	isBad?: boolean;
}

export interface Command {
	/** One sentence. */
	about: string;
	/** Options that take a value, with what they mean; a leading `!` marks one that must be there. */
	options: Readonly<Record<string, string>>;
	flags?: Readonly<Record<string, string>>;
	words?: string;
	run(context: CommandContext): Promise<Answer>;
}

/** Who the log of changes names for what is done at the console. */
export function consoleActor(): { kind: 'command'; name: string } {
	return { kind: 'command', name: `${process.env.SUDO_USER ?? process.env.USER ?? 'somebody'} at the console` };
}

/** Reads a command's own arguments. Throws a `Refusal` that names what is unknown or missing. */
export function readArguments(
	name: string,
	command: Command,
	args: readonly string[],
): Omit<CommandContext, 'pool'> & { isJson: boolean } {
	const config: NonNullable<ParseArgsConfig['options']> = { json: { type: 'boolean' }, help: { type: 'boolean' } };
	for (const option of Object.keys(command.options)) config[option] = { type: 'string' };
	for (const flag of Object.keys(command.flags ?? {})) config[flag] = { type: 'boolean' };
	let parsed;
	try {
		parsed = parseArgs({ args: [...args], options: config, allowPositionals: command.words !== undefined, strict: true });
	} catch (error) {
		throw new Refusal(`${(error as Error).message.split('. ')[0]}.\n${usageOf(name, command)}`);
	}
	const options: Record<string, string | undefined> = {};
	const flags = new Set<string>();
	for (const [key, value] of Object.entries(parsed.values)) {
		if (typeof value === 'string') options[key] = value;
		else if (value === true) flags.add(key);
	}
	const missing = Object.entries(command.options).filter(([option, about]) => about.startsWith('!') && !options[option]?.trim());
	if (missing.length > 0) {
		throw new Refusal(`${name} needs ${missing.map(([option]) => `--${option}`).join(' and ')}.\n${usageOf(name, command)}`);
	}
	return { options, flags, words: parsed.positionals, isJson: flags.has('json') };
}

/** How a command is called, a line for each option. */
export function usageOf(name: string, command: Command): string {
	const lines = [`Usage: npm run admin -- ${name}${command.words ? ` ${command.words}` : ''}`, `  ${command.about}`];
	for (const [option, about] of Object.entries(command.options))
		lines.push(`  --${`${option} VALUE`.padEnd(20)} ${about.replace(/^!/, '')}`);
	for (const [flag, about] of Object.entries(command.flags ?? {})) lines.push(`  --${flag.padEnd(20)} ${about}`);
	lines.push(`  --${'json'.padEnd(20)} One JSON object instead of text.`);
	return lines.join('\n');
}
