// Pure.
/** Shortest allowed; 15 is recommended to people [NIST SP 800-63B-4 §3.1.1.2]. */
export const MIN_PASSWORD = 8;
export const RECOMMENDED_PASSWORD = 15;
/** Not a limit on strength: it only keeps a megabyte from being hashed. */
export const MAX_PASSWORD = 1_000;

export type PasswordFault = 'too-short' | 'too-long' | 'common' | 'personal';

/** What the person reads for each fault. */
export const PASSWORD_FAULTS: Readonly<Record<PasswordFault, string>> = {
	'too-short': `At least ${MIN_PASSWORD} characters; ${RECOMMENDED_PASSWORD} or more is better. Several words make a good one.`,
	'too-long': `At most ${MAX_PASSWORD.toLocaleString('en')} characters.`,
	common: 'This one is among the first that anybody would try. Several unrelated words make a good one.',
	personal: 'Your name and address are among the first that anybody would try.',
};

/** Words that passwords are made of when nobody thinks about it; from memory of published top lists, and the trade's own. */
const OBVIOUS = new Set(
	(
		'password passwort passw0rd passwd pass secret geheim welcome willkommen bienvenue letmein login logon signin access entrance open opensesame hello hallo ' +
		'hola admin administrator root superuser user guest test testing tester demo default changeme change please master manager operator engineer ' +
		'maintenance service support control controls controller system server computer internet network wireless gateway sensor vibration machine pump motor ' +
		'plant factory reading millrace scada historian modbus mqtt opcua qwerty qwertz azerty qwertyuiop asdfgh asdfghjkl zxcvbn zxcvbnm qazwsx qweasd ' +
		'iloveyou loveyou lovely love princess sunshine shadow dragon monkey football baseball basketball soccer hockey superman batman spiderman starwars ' +
		'pokemon cheese chocolate cookie banana orange apple summer winter spring autumn january february march april june july august september october ' +
		'november december monday tuesday wednesday thursday friday saturday sunday freedom whatever trustno trustnoone nothing company business office mustang ' +
		'michael jennifer jordan jessica ashley daniel thomas george charlie andrew michelle nicole matthew hunter killer pepper ginger buster tigger harley ' +
		'purple silver golden flower angel family mother father baby michelle samsung android windows linux coffee london berlin paris america canada'
	).split(' '),
);

const RUNS = [
	'01234567890123456789',
	'98765432109876543210',
	'abcdefghijklmnopqrstuvwxyz',
	'zyxwvutsrqponmlkjihgfedcba',
	'qwertyuiopasdfghjklzxcvbnm',
];

/** The letters behind the usual disguises: `P@ssw0rd!` is `password`. */
function undisguised(password: string): string {
	const swaps: Record<string, string> = {
		'0': 'o',
		'1': 'i',
		'3': 'e',
		'4': 'a',
		'5': 's',
		'7': 't',
		'@': 'a',
		$: 's',
		'!': 'i',
	};
	return password.toLowerCase().replace(/[013457@$!]/g, (sign) => swaps[sign] ?? sign);
}

function isObvious(password: string): boolean {
	const lower = password.toLowerCase();
	if (/^(.{1,4})\1+$/.test(lower)) return true;
	if (RUNS.some((run) => run.includes(lower))) return true;
	// A known word with figures and signs around it stays a known word; so do two of them side by side.
	const bare = lower.replace(/^[^a-z]+|[^a-z]+$/g, '');
	const candidates = [
		lower,
		bare,
		undisguised(lower).replace(/^[^a-z]+|[^a-z]+$/g, ''),
		undisguised(lower.replace(/[\d\W_]+$/, '')),
	];
	return candidates.some((candidate) => {
		if (OBVIOUS.has(candidate)) return true;
		const half = candidate.slice(0, candidate.length / 2);
		return candidate.length > 4 && candidate === half + half && OBVIOUS.has(half);
	});
}

/** What is wrong with a new password, or null. No rule of composition: length and not being obvious are what counts. */
export function findPasswordFault(password: string, person: { email: string; name: string }): PasswordFault | null {
	const length = [...password].length;
	if (length < MIN_PASSWORD) return 'too-short';
	if (length > MAX_PASSWORD) return 'too-long';
	if (isObvious(password)) return 'common';
	const bare = password.toLowerCase().replace(/[\d\W_]/g, '');
	const own = [person.email, person.email.split('@')[0] ?? '', person.name].map((text) =>
		text.toLowerCase().replace(/[\d\W_]/g, ''),
	);
	return own.some((text) => text.length > 2 && text === bare) ? 'personal' : null;
}
