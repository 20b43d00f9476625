// Edge: store. May touch: the latest table, in the caller's transaction.
import { toStored } from '#lib/domain/quality.ts';
import type { Client } from '#lib/server/db/pool.ts';
import type { Confirmation, LatestUpdate } from './write-batch.ts';

const iso = (at: number | null) => (at === null ? null : new Date(at).toISOString());

/** Moves latest values forward; an older one changes nothing unless it resets a time that lay ahead of the clock. In tag order, so that two writers never wait for each other. */
export async function upsertLatest(client: Client, updates: readonly LatestUpdate[]): Promise<void> {
	if (updates.length === 0) return;
	const newest = new Map<number, LatestUpdate>();
	for (const update of updates) {
		const known = newest.get(update.tagId);
		if (!known || update.resets || update.at >= known.at)
			newest.set(update.tagId, known?.resets ? { ...update, resets: true } : update);
	}
	const rows = [...newest.values()].sort((a, b) => a.tagId - b.tagId);
	await client.query(
		`INSERT INTO latest AS l (tag_id, at, value, quality, received_at, confirmed_at, is_hub_time, source_at, reason, raw, wire, verdict, is_stale, revision, updated_at)
		 SELECT g.tag_id, g.at, g.value, g.quality, g.received_at, g.confirmed_at, g.is_hub_time, g.source_at, g.reason, g.raw, g.wire, g.verdict, g.is_stale, g.revision, now()
		 FROM unnest($1::int[], $2::timestamptz[], $3::float8[], $4::int[], $5::timestamptz[], $6::timestamptz[], $7::bool[], $8::timestamptz[], $9::text[], $10::text[], $11::text[], $12::text[], $13::bool[], $14::int[], $15::bool[])
			AS g(tag_id, at, value, quality, received_at, confirmed_at, is_hub_time, source_at, reason, raw, wire, verdict, is_stale, revision, resets)
		 WHERE EXISTS (SELECT FROM tags t WHERE t.id = g.tag_id AND g.revision >= t.unit_revision)
		 ON CONFLICT (tag_id) DO UPDATE SET at = excluded.at, value = excluded.value, quality = excluded.quality, received_at = excluded.received_at,
			confirmed_at = greatest(l.confirmed_at, excluded.confirmed_at), is_hub_time = excluded.is_hub_time, source_at = excluded.source_at, reason = excluded.reason,
			raw = excluded.raw, wire = CASE WHEN excluded.at = l.at THEN coalesce(excluded.wire, l.wire) ELSE excluded.wire END, verdict = excluded.verdict, is_stale = excluded.is_stale, revision = excluded.revision, updated_at = now()
		 WHERE excluded.at >= l.at OR excluded.tag_id = ANY($16::int[])`,
		[
			rows.map((row) => row.tagId),
			rows.map((row) => iso(row.at)),
			rows.map((row) => row.value),
			rows.map((row) => toStored(row.quality)),
			rows.map((row) => iso(row.receivedAt)),
			rows.map((row) => iso(row.confirmedAt)),
			rows.map((row) => row.isHubTime),
			rows.map((row) => iso(row.sourceAt)),
			rows.map((row) => row.reason),
			rows.map((row) => row.raw),
			rows.map((row) => row.wire),
			rows.map((row) => row.verdict),
			rows.map((row) => row.isStale),
			rows.map((row) => row.revision),
			rows.map((row) => row.resets),
			rows.filter((row) => row.resets).map((row) => row.tagId),
		],
	);
}

/** The last values still stand: renews freshness and the verdict that a delay's end may have changed. */
export async function confirmLatest(client: Client, confirmations: readonly Confirmation[]): Promise<void> {
	if (confirmations.length === 0) return;
	const rows = [...new Map(confirmations.map((one) => [one.tagId, one])).values()].sort((a, b) => a.tagId - b.tagId);
	await client.query(
		`UPDATE latest l SET confirmed_at = greatest(l.confirmed_at, g.at), verdict = CASE WHEN l.verdict = 'unknown' THEN l.verdict ELSE g.verdict END, updated_at = now()
		 FROM unnest($1::int[], $2::timestamptz[], $3::text[]) AS g(tag_id, at, verdict) WHERE l.tag_id = g.tag_id AND NOT l.is_stale`,
		[rows.map((row) => row.tagId), rows.map((row) => iso(row.confirmedAt)), rows.map((row) => row.verdict)],
	);
}
