// Edge: store page. May touch: settings, retention rules, packing state; audit.
import { eq, sql } from 'drizzle-orm';
import { ok, refuse, type Outcome } from '#lib/domain/outcome.ts';
import { faultOfRetention, type Retention } from '#lib/domain/retention.ts';
import { recordAudit, type AuditActor } from '#lib/server/audit/record.ts';
import type { Db, Pool } from '#lib/server/db/pool.ts';
import { settings, sites } from '#lib/server/db/schema/site.ts';
import { packingState, retentionRules } from '#lib/server/db/schema/store.ts';
import { inTransaction } from '#lib/server/db/transaction.ts';
import { readRetention, RETENTION_KEY } from '#lib/pipeline/store/retention.ts';

interface By {
	actor: AuditActor;
	ip: string | null;
}

/** Sets how long each kind of data is kept. Refusal: 'contradiction', with the member and why. */
export async function saveRetention(pool: Pool, retention: Retention, by: By): Promise<Outcome<Retention, 'contradiction'>> {
	const fault = faultOfRetention(retention);
	if (fault) return refuse('contradiction', `${fault.field} ${fault.message}`);
	return inTransaction(pool, async (db, client) => {
		const before = await readRetention(client);
		await db
			.insert(settings)
			.values({ key: RETENTION_KEY, value: retention })
			.onConflictDoUpdate({ target: settings.key, set: { value: retention, updatedAt: sql`now()` } });
		await record(db, by, { action: 'retention.changed', name: 'the installation', before, after: retention });
		return ok(retention);
	});
}

/** What a rule is for, in words. */
function nameOf(site: string | null, quantity: string | null): string {
	return [quantity ?? 'everything', site ? `at ${site}` : 'everywhere'].join(' ');
}

/** Keeps raw readings of a site, a quantity or both for `rawDays`. Refusals: 'site-unknown', 'rule-taken', 'rule-empty'. */
export async function addRule(
	pool: Pool,
	rule: { siteId: number | null; quantity: string | null; rawDays: number },
	by: By,
): Promise<Outcome<number, 'site-unknown' | 'rule-taken' | 'rule-empty'>> {
	if (rule.siteId === null && rule.quantity === null) return refuse('rule-empty');
	return inTransaction(pool, async (db) => {
		const [site] = rule.siteId === null ? [] : await db.select().from(sites).where(eq(sites.id, rule.siteId));
		if (rule.siteId !== null && !site) return refuse('site-unknown');
		const [added] = await db.insert(retentionRules).values(rule).onConflictDoNothing().returning();
		if (!added) return refuse('rule-taken');
		await mustRegroup(db);
		await record(db, by, {
			action: 'retention-rule.added',
			name: nameOf(site?.name ?? null, rule.quantity),
			before: null,
			after: { raw_days: rule.rawDays },
		});
		return ok(added.id);
	});
}

/**
 * Takes a rule away; its tags follow the next wider rule, and their blocks move there.
 * Refusals: 'rule-unknown'; 'would-drop' where it kept longer than the default and `mayDrop` does not allow it.
 */
export async function removeRule(
	pool: Pool,
	id: number,
	by: By & { mayDrop: boolean },
): Promise<Outcome<null, 'rule-unknown' | 'would-drop'>> {
	return inTransaction(pool, async (db, client) => {
		const [removed] = await db.select().from(retentionRules).where(eq(retentionRules.id, id)).for('update');
		if (!removed) return refuse('rule-unknown');
		if (!by.mayDrop && removed.rawDays > (await readRetention(client)).rawDays) return refuse('would-drop');
		await db.delete(retentionRules).where(eq(retentionRules.id, id));
		const [site] = removed.siteId === null ? [] : await db.select().from(sites).where(eq(sites.id, removed.siteId));
		await mustRegroup(db);
		await record(db, by, {
			action: 'retention-rule.removed',
			name: nameOf(site?.name ?? null, removed.quantity),
			before: { raw_days: removed.rawDays },
			after: null,
		});
		return ok(null);
	});
}

/** In the change's own transaction: packing looks at the rules again under this row's lock. */
async function mustRegroup(db: Db): Promise<void> {
	await db.update(packingState).set({ mustRegroup: true });
}

async function record(db: Db, by: By, entry: { action: string; name: string; before: unknown; after: unknown }): Promise<void> {
	await recordAudit(db, {
		siteId: null,
		actor: by.actor,
		ip: by.ip,
		action: entry.action,
		subjectKind: 'retention',
		subjectName: entry.name,
		before: entry.before,
		after: entry.after,
	});
}
