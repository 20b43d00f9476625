// Edge: people. May touch: user, session and role tables; site table; outbox.
import { ok, refuse, type Outcome } from '#lib/domain/outcome.ts';
import { recordAudit, type AuditActor } from '#lib/server/audit/record.ts';
import type { Pool } from '#lib/server/db/pool.ts';
import { feedHeads } from '#lib/server/db/schema/reading.ts';
import { sites } from '#lib/server/db/schema/site.ts';
import { inTransaction } from '#lib/server/db/transaction.ts';
import { findSite, type Site } from '#lib/server/identity/find-site.ts';

/** First parts of paths that are ours, never a site's. */
export const RESERVED_SLUGS: readonly string[] = [
	'admin',
	'api',
	'sign-in',
	'sign-out',
	'invite',
	'reset',
	'account',
	'metrics',
	'healthz',
	'readyz',
];

export type AddSiteRefusal = 'slug-form' | 'slug-reserved' | 'time-zone-unknown';

/** True for a name of the IANA time zone database that this machine knows. */
function isTimeZone(name: string): boolean {
	try {
		new Intl.DateTimeFormat('en', { timeZone: name });
		return true;
	} catch {
		return false;
	}
}

/** Adds a site; one that is there already is answered as it is. Refusals: 'slug-form', 'slug-reserved', 'time-zone-unknown'. */
export async function addSite(
	pool: Pool,
	input: { slug: string; name: string; timeZone: string; actor: AuditActor; ip: string | null },
): Promise<Outcome<{ site: Site; isNew: boolean }, AddSiteRefusal>> {
	if (!/^[a-z0-9-]{1,60}$/.test(input.slug)) return refuse('slug-form');
	if (RESERVED_SLUGS.includes(input.slug)) return refuse('slug-reserved');
	if (!isTimeZone(input.timeZone)) return refuse('time-zone-unknown');
	return inTransaction(pool, async (db) => {
		const [added] = await db
			.insert(sites)
			.values({ slug: input.slug, name: input.name, timeZone: input.timeZone })
			.onConflictDoNothing()
			.returning();
		if (!added) {
			const known = await findSite(db, input.slug);
			if (!known) throw new Error(`site ${input.slug} was neither added nor found`);
			return ok({ site: known, isNew: false });
		}
		await db.insert(feedHeads).values({ siteId: added.id }).onConflictDoNothing();
		await recordAudit(db, {
			siteId: added.id,
			actor: input.actor,
			ip: input.ip,
			action: 'site.added',
			subjectKind: 'site',
			subjectId: added.id,
			subjectName: added.name,
			after: { slug: added.slug, name: added.name, time_zone: added.timeZone },
		});
		return ok({ site: { id: added.id, slug: added.slug, name: added.name, timeZone: added.timeZone }, isNew: true });
	});
}
