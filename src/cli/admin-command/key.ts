// Edge: cli. May touch: server functions. No rule of its own.
import { KEY_SCOPES, type KeyScope } from '#lib/domain/access/role.ts';
import { createDb } from '#lib/server/db/pool.ts';
import { createKey, findKeyByName, revokeKey } from '#lib/server/identity/api-key.ts';
import { parseRfc3339 } from '#lib/server/http/rfc3339.ts';
import { Refusal } from '../bootstrap.js';
import { consoleActor, type Command } from './command.ts';

const listOf = (text: string | undefined) => [
	...new Set(
		(text ?? '')
			.split(',')
			.map((part) => part.trim())
			.filter(Boolean),
	),
];

export const keyAdd: Command = {
	about: 'Makes an API key and shows it this once.',
	options: {
		name: '!What the key is for; one live key a name.',
		site: '!Slugs of the sites it may see, separated by commas.',
		scopes: `!Of ${KEY_SCOPES.join(', ')}; separated by commas.`,
		expires: 'When it ends, an RFC 3339 time; never unless given.',
	},
	async run({ options, pool }) {
		const scopes = listOf(options.scopes);
		const unknown = scopes.filter((scope) => !(KEY_SCOPES as readonly string[]).includes(scope));
		if (unknown.length > 0) throw new Refusal(`--scopes names "${unknown.join(', ')}": ${KEY_SCOPES.join(', ')} are known.`);
		const expires = options.expires === undefined ? null : parseRfc3339(options.expires);
		if (options.expires !== undefined && (expires === null || expires <= Date.now())) {
			throw new Refusal(`--expires is "${options.expires}": a time ahead such as 2030-01-31T12:00:00Z expected.`);
		}
		const outcome = await createKey(await pool(), {
			name: (options.name ?? '').trim(),
			sites: listOf(options.site),
			scopes: scopes as KeyScope[],
			expiresAt: expires === null ? null : new Date(expires),
			actor: consoleActor(),
			ip: null,
		});
		if (!outcome.ok) {
			switch (outcome.reason) {
				case 'name-taken':
					throw new Refusal(`A live key is named "${options.name}" already: revoke it first, or choose another name.`);
				case 'site-not-found':
					throw new Refusal(`There is no site "${outcome.detail}": npm run admin -- site add.`);
			}
		}
		const { id, key } = outcome.value;
		return { text: `${key}\nKeep it now; it is not shown again. Id ${id}.`, json: { id, key } };
	},
};

export const keyRevoke: Command = {
	about: 'Ends an API key at once.',
	options: { name: 'Name of the key.', id: 'Or its id.' },
	async run({ options, pool }) {
		if ((options.name === undefined) === (options.id === undefined)) throw new Refusal('key revoke needs --name or --id.');
		const database = await pool();
		const id = options.id ?? (await findKeyByName(createDb(database), options.name ?? ''))?.id;
		const outcome = id === undefined ? null : await revokeKey(database, id, { actor: consoleActor(), ip: null });
		if (!outcome?.ok)
			throw new Refusal(`No live key ${options.name ? `is named "${options.name}"` : `has the id ${options.id}`}.`);
		return { text: `Revoked ${outcome.value.name}.`, json: { ...outcome.value, revoked: true } };
	},
};
