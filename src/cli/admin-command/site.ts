// Edge: cli. May touch: server functions. No rule of its own.
import { addSite } from '#lib/server/people/add-site.ts';
import { Refusal } from '../bootstrap.js';
import { consoleActor, type Command } from './command.ts';

export const siteAdd: Command = {
	about: 'Adds a site; adding it again changes nothing.',
	options: {
		slug: '!The site in addresses: small letters, figures and hyphens.',
		name: '!The name that people read.',
		'time-zone': 'Of the IANA database, such as Europe/Berlin; UTC unless given.',
	},
	async run({ options, pool }) {
		const outcome = await addSite(await pool(), {
			slug: options.slug ?? '',
			name: options.name ?? '',
			timeZone: options['time-zone'] ?? 'UTC',
			actor: consoleActor(),
			ip: null,
		});
		if (!outcome.ok) {
			switch (outcome.reason) {
				case 'slug-form':
					throw new Refusal(`--slug is "${options.slug}": 1 to 60 small letters, figures and hyphens expected.`);
				case 'slug-reserved':
					throw new Refusal(`--slug is "${options.slug}": that word is used in addresses already, choose another.`);
				case 'time-zone-unknown':
					throw new Refusal(
						`--time-zone is "${options['time-zone']}": a name of the IANA database such as Europe/Berlin expected.`,
					);
			}
		}
		const { site, isNew } = outcome.value;
		return {
			text: isNew ? `Added the site ${site.name} (${site.slug}).` : `The site ${site.slug} is there already.`,
			json: { id: site.id, slug: site.slug, name: site.name, time_zone: site.timeZone, added: isNew },
		};
	},
};
