// Edge: cli. `npm run soak -- --minutes N --rate R`: numbered samples through the product with a fault a minute; prints one table.
import { parseArgs } from 'node:util';
import { Refusal } from './bootstrap.js';
import { FAULTS } from './soak/faults.ts';
import { runSoak } from './soak/run-soak.ts';

const HELP = `npm run soak -- [--minutes N] [--rate R] [--fault-every SECONDS]

Starts the whole product in a folder of its own, publishes numbered samples at R readings a second (5000) for N minutes (10), and
spoils something every so often (60 s). Counts what was sent, stored, told as lost and delivered by the feed. Ends with 1 when
anything is missing without a word, stored twice, or missing from the feed.`;

/** After this the collector's memory should not grow any more. */
const SETTLED_S = 180;
const FLAT = 1.1;

function number(name: string, text: string | undefined, usual: number, least: number, most: number): number {
	if (text === undefined) return usual;
	const value = Number(text);
	if (!Number.isFinite(value) || value < least || value > most)
		throw new Refusal(`--${name}: found "${text}", expected a number from ${least} to ${most}.`);
	return value;
}

let values: { minutes?: string; rate?: string; 'fault-every'?: string; help?: boolean };
try {
	({ values } = parseArgs({
		options: {
			minutes: { type: 'string' },
			rate: { type: 'string' },
			'fault-every': { type: 'string' },
			help: { type: 'boolean' },
		},
	}));
} catch (error) {
	throw new Refusal(`${(error as Error).message}\n\n${HELP}`);
}
if (values.help) {
	console.log(HELP);
} else {
	const minutes = number('minutes', values.minutes, 10, 0.5, 10_000);
	const rate = number('rate', values.rate, 5_000, 10, 100_000);
	const faultEveryS = number('fault-every', values['fault-every'], 60, 5, 3_600);
	const result = await runSoak({ seconds: minutes * 60, rate, faultEveryS, say: (line) => console.error(line) });
	const rows: [string, string][] = [
		['sent', result.sent.toLocaleString('en-GB')],
		['stored', result.stored.toLocaleString('en-GB')],
		['told as lost', result.reported.toLocaleString('en-GB')],
		['missing without a word', result.unreported.toLocaleString('en-GB')],
		['stored twice', result.doubled.toLocaleString('en-GB')],
		['delivered by the feed', result.delivered.toLocaleString('en-GB')],
		['delivered twice', result.deliveredTwice.toLocaleString('en-GB')],
		...result.faults.map(({ name, atS }): [string, string] => [`fault at ${atS} s`, FAULTS[name].title]),
		...memoryRows(result.memory),
	];
	const wide = Math.max(...rows.map(([name]) => name.length));
	console.log(rows.map(([name, value]) => `${name.padEnd(wide)}  ${value}`).join('\n'));
	const isWhole =
		result.unreported === 0 && result.doubled === 0 && result.deliveredTwice === 0 && result.delivered === result.stored;
	if (!isWhole) process.exitCode = 1;
}

/** Memory a minute, and whether it stayed flat once settled, of the process that lived longest. */
function memoryRows(memory: readonly { atS: number; mb: number; pid: number }[]): [string, string][] {
	const last = memory.at(-1);
	if (!last) return [];
	const settled = memory.filter((one) => one.pid === last.pid && one.atS >= SETTLED_S);
	const byMinute = memory.filter((one, index) => index % 6 === 0).map((one) => `${Math.round(one.atS / 60)} min ${one.mb}`);
	const rows: [string, string][] = [['collector memory, MB', byMinute.join(', ')]];
	const [first] = settled;
	if (first && settled.length > 6) {
		const head = settled.slice(0, 6).reduce((sum, one) => sum + one.mb, 0) / 6;
		const tail = settled.slice(-6).reduce((sum, one) => sum + one.mb, 0) / 6;
		rows.push([
			'after three minutes',
			`${Math.round(head)} MB, at the end ${Math.round(tail)} MB: ${tail <= head * FLAT ? 'flat' : 'grows'}`,
		]);
	}
	return rows;
}
