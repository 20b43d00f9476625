// Edge: cli. May touch: server functions, standard input. No rule of its own.
import { createInterface } from 'node:readline/promises';
import { randomBytes } from 'node:crypto';
import { SITE_ROLES, type SiteRole } from '#lib/domain/access/role.ts';
import { readConfig } from '#lib/server/config.ts';
import { createDb, type Pool } from '#lib/server/db/pool.ts';
import { PASSWORD_FAULTS } from '#lib/server/identity/password-rules.ts';
import { setPasswordOf } from '#lib/server/identity/set-password.ts';
import { changeRoles, readRoles } from '#lib/server/people/change-roles.ts';
import { findPersonByEmail, invitePerson } from '#lib/server/people/invite-person.ts';
import { Refusal } from '../bootstrap.js';
import { consoleActor, type Command } from './command.ts';

function noSite(slug: string | undefined): Refusal {
	return new Refusal(`There is no site "${slug}": npm run admin -- site add.`);
}

export const userAdd: Command = {
	about: 'Adds a person, or gives one who is there a further role; answers a link to choose a password.',
	options: {
		email: '!Address to sign in with.',
		name: 'Name that people read; needed for a new person.',
		site: 'Slug of the site.',
		role: `At that site: ${SITE_ROLES.join(', ')}.`,
		password: 'Sets it at once. Others can see it while the command runs: user passwd reads it from standard input.',
	},
	flags: { admin: 'Makes an administrator of the whole installation.' },
	async run({ options, flags, pool }) {
		const email = (options.email ?? '').trim();
		if (!/^[^\s@]+@[^\s@]+$/.test(email)) throw new Refusal(`--email is "${email}": an address like ada@example.org expected.`);
		if ((options.site === undefined) !== (options.role === undefined)) throw new Refusal('--site and --role belong together.');
		const role = SITE_ROLES.find((one) => one === options.role);
		if (options.role !== undefined && !role) {
			const hint = options.role === 'admin' ? ' For an administrator use --admin, without --site and --role.' : '';
			throw new Refusal(`--role is "${options.role}": one of ${SITE_ROLES.join(', ')} expected.${hint}`);
		}
		const isAdmin = flags.has('admin');
		const granted: Record<string, SiteRole> = options.site && role ? { [options.site]: role } : {};
		const database = await pool();
		const known = await findPersonByEmail(createDb(database), email);
		if (!known && !isAdmin && !role) throw new Refusal('A new person needs --site and --role, or --admin.');
		if (!known && !options.name?.trim()) throw new Refusal('A new person needs --name.');
		const added = known
			? await grant(database, known, granted, isAdmin)
			: await invite(database, { email, name: options.name ?? '', roles: granted, isAdmin });
		if (options.password !== undefined) await setPassword(database, email, options.password);
		const link = options.password === undefined ? added.link : null;
		const text = `${known ? 'Known already' : 'Added'}: ${email}${role ? `, ${role} at ${options.site}` : ''}${isAdmin ? ', administrator' : ''}.`;
		return {
			text: link ? `${text}\nTo choose a password, once, within seven days: ${link}` : text,
			json: { id: added.id, email, added: !known, ...(link ? { link } : {}) },
		};
	},
};

async function invite(
	pool: Pool,
	input: { email: string; name: string; roles: Record<string, SiteRole>; isAdmin: boolean },
): Promise<{ id: string; link: string | null }> {
	const outcome = await invitePerson(pool, { ...input, origin: readConfig().origin, actor: consoleActor(), ip: null });
	if (outcome.ok) return outcome.value;
	if (outcome.reason === 'site-not-found') throw noSite(outcome.detail);
	throw new Refusal(`${input.email} was added by somebody else just now; try again.`);
}

async function grant(
	pool: Pool,
	known: { id: string; isAdmin: boolean },
	granted: Record<string, SiteRole>,
	isAdmin: boolean,
): Promise<{ id: string; link: null }> {
	const before = await readRoles(createDb(pool), known.id);
	const isSame = Object.entries(granted).every(([slug, role]) => before[slug] === role) && (known.isAdmin || !isAdmin);
	if (!isSame) {
		const outcome = await changeRoles(pool, {
			id: known.id,
			roles: { ...before, ...granted },
			isAdmin: known.isAdmin || isAdmin,
			actor: consoleActor(),
			ip: null,
		});
		if (!outcome.ok && outcome.reason === 'site-not-found') throw noSite(outcome.detail);
		if (!outcome.ok) throw new Refusal(`The roles could not be given: ${outcome.reason}.`);
	}
	return { id: known.id, link: null };
}

export const userPasswd: Command = {
	about: 'Sets a password and ends the person’s sessions. Read from standard input, or asked for; --generate makes one.',
	options: { email: '!Address of the person.', password: 'Others can see it while the command runs; standard input is better.' },
	flags: { generate: 'Makes a password and shows it this once.' },
	async run({ options, flags, pool }) {
		const email = (options.email ?? '').trim();
		const database = await pool();
		const typed = flags.has('generate') ? '' : (options.password ?? (await readPassword()));
		const generated = typed === '' ? randomBytes(15).toString('base64url') : null;
		const id = await setPassword(database, email, generated ?? typed);
		return {
			text: generated ? `${generated}\nThe password of ${email}; it is not shown again.` : `The password of ${email} is set.`,
			json: { id, email, ...(generated ? { password: generated } : {}) },
		};
	},
};

async function setPassword(pool: Pool, email: string, password: string): Promise<string> {
	const outcome = await setPasswordOf(pool, { email, password, actor: consoleActor() });
	if (outcome.ok) return outcome.value.id;
	if (outcome.reason === 'person-not-found') throw new Refusal(`Nobody has the address ${email}: npm run admin -- user add.`);
	throw new Refusal(PASSWORD_FAULTS[outcome.reason]);
}

/** The first line of standard input; on a terminal it is asked for. Empty where nothing comes. */
async function readPassword(): Promise<string> {
	const lines = createInterface({
		input: process.stdin,
		output: process.stdin.isTTY ? process.stderr : undefined,
		terminal: false,
	});
	if (process.stdin.isTTY) process.stderr.write('New password (seen as you type): ');
	try {
		for await (const line of lines) return line;
		return '';
	} finally {
		lines.close();
	}
}
