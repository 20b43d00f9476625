// Edge: test values. May touch: test-value table, audit.
import { ok, refuse, type Outcome } from '#lib/domain/outcome.ts';
import { recordAudit } from '#lib/server/audit/record.ts';
import type { Pool } from '#lib/server/db/pool.ts';
import { inTransaction } from '#lib/server/db/transaction.ts';
import type { Caller } from '../source-setup/save-source.ts';

export interface TestValueSet {
	tagId: number;
	tag: string;
	value: number;
	until: string;
}

/**
 * Lets a value stand in for a tag's own until its deadline, which is kept in the database and ends it whatever dies. `seconds` 0 ends one that stands.
 * A key may not set one while somebody reads the site's feed, unless a person confirmed this tag within the last hour by setting one.
 * Refusals: 'tag-not-found', 'needs-a-person'.
 */
export async function setTestValue(
	pool: Pool,
	input: { tag: string; value: number; seconds: number },
	caller: Caller,
): Promise<Outcome<TestValueSet, 'tag-not-found' | 'needs-a-person'>> {
	return inTransaction(pool, async (db, client) => {
		const found = await client.query<{ id: number; name: string }>(
			'SELECT id, name FROM tags WHERE site_id = $1 AND lower(name) = lower($2) AND published_at IS NOT NULL AND retired_at IS NULL',
			[caller.siteId, input.tag],
		);
		const tag = found.rows[0];
		if (!tag) return refuse('tag-not-found', `no published tag named "${input.tag}"`);
		if (caller.actor.kind === 'key') {
			const inUse = await client.query(
				"SELECT 1 FROM feed_readers WHERE site_id = $1 AND read_at > now() - interval '5 minutes'",
				[caller.siteId],
			);
			const confirmed = await client.query(
				`SELECT 1 FROM audit_entries WHERE site_id = $1 AND actor_kind = 'person' AND action = 'test-value.set' AND subject_id = $2 AND at > now() - interval '1 hour'`,
				[caller.siteId, String(tag.id)],
			);
			if ((inUse.rowCount ?? 0) > 0 && confirmed.rowCount === 0)
				return refuse('needs-a-person', 'the feed is in use; a person must set a test value of this tag first');
		}
		const before = await client.query<{ value: number; until: Date }>(
			'UPDATE test_values SET ended_at = now() WHERE tag_id = $1 AND ended_at IS NULL AND until > now() RETURNING value, until',
			[tag.id],
		);
		const made = await client.query<{ until: Date }>(
			`INSERT INTO test_values (site_id, tag_id, value, set_by, until, ended_at)
			 VALUES ($1, $2, $3, $4, clock_timestamp() + make_interval(secs => $5), CASE WHEN $5::float8 <= 0 THEN now() END) RETURNING until`,
			[caller.siteId, tag.id, input.value, caller.actor.name, input.seconds],
		);
		const until = made.rows[0]?.until.toISOString() ?? '';
		await recordAudit(db, {
			...caller,
			action: input.seconds > 0 ? 'test-value.set' : 'test-value.ended',
			subjectKind: 'tag',
			subjectId: tag.id,
			subjectName: tag.name,
			before: before.rows[0] ? { value: before.rows[0].value, until: before.rows[0].until.toISOString() } : null,
			after: input.seconds > 0 ? { value: input.value, until } : null,
		});
		await client.query("SELECT pg_notify('millrace_requests', 'test-value')");
		return ok({ tagId: tag.id, tag: tag.name, value: input.value, until });
	});
}
