import { error, fail } from '@sveltejs/kit';
import { z } from 'zod';
import { webPool } from '#lib/server/db/database.ts';
import { requireSite } from '#lib/server/identity/require.ts';
import { findSourcePage } from '#lib/server/pulse/read-source.ts';
import { decideCertificate } from '#lib/server/source-setup/trust-certificate.ts';
import type { Actions, PageServerLoad } from './$types';

export const load: PageServerLoad = async ({ locals, params, depends }) => {
	const { site } = await requireSite(locals, params.site, 'site:read');
	depends('millrace:sources');
	const found = await findSourcePage(webPool(), site.id, params.id);
	if (!found) error(404, 'This site has no such source.');
	return { title: found.source.name, ...found };
};

const decision = z.object({ fingerprint: z.string().min(1).max(200), state: z.enum(['trusted', 'rejected']) });

export const actions: Actions = {
	/** Trusts a certificate that this source's server showed, or takes the trust back. */
	decide: async ({ locals, params, request }) => {
		const { person, site } = await requireSite(locals, params.site, 'sources:edit');
		const parsed = decision.safeParse(Object.fromEntries(await request.formData()));
		const page = parsed.success ? await findSourcePage(webPool(), site.id, params.id) : null;
		if (!parsed.success || !page?.certificates.some((shown) => shown.fingerprint === parsed.data.fingerprint)) {
			return fail(400, { message: 'This source has shown no such certificate.' });
		}
		const { fingerprint, state } = parsed.data;
		const decided = await decideCertificate(webPool(), fingerprint, state, { siteId: site.id, actor: person, ip: locals.ip });
		if (!decided.ok) return fail(409, { message: 'The certificate is no longer there.' });
		return {
			message: state === 'trusted' ? 'Trusted; the source connects anew.' : 'Rejected; the source is not connected with it.',
		};
	},
};
