// Edge: dead letters. May touch: dead-letter table, store, audit. Sends set-aside readings into the store once more.
import { recordAudit, type AuditActor } from '#lib/server/audit/record.ts';
import type { Client, Pool } from '#lib/server/db/pool.ts';
import { inTransaction } from '#lib/server/db/transaction.ts';
import { journalReadingOf } from '#lib/pipeline/store/copy-writer.ts';
import { readingOfLetter } from '#lib/pipeline/store/dead-letters.ts';
import { appendJournal } from '#lib/pipeline/store/feed-journal.ts';
import { ensureJournalDay, ensureReadingDay, rawEdgeOf } from '#lib/pipeline/store/partitions.ts';
import { longestRawDays } from '#lib/pipeline/store/retention.ts';
import { storeReadings } from '#lib/pipeline/store/store-readings.ts';
import type { StoredReading } from '#lib/pipeline/store/write-batch.ts';

/** Letters a transaction; more of a reason are sent by asking again. */
export const MOST_LETTERS = 2_000;

const DAY_MS = 86_400_000;
/** No sound reading lies further ahead. */
const AHEAD_MS = 366 * DAY_MS;

export interface SentAgain {
	/** Readings stored and fed now. */
	stored: number;
	/** Readings that were stored already: their letters are closed too. */
	duplicates: number;
	/** Letters that came back, by their reason now. */
	refused: Record<string, number>;
	/** Letters of what was asked for that are still to be sent: those after `last_id`. */
	left: number;
	last_id: number | null;
}

interface Letter {
	id: number;
	reason: string;
	row: unknown;
}

/** Sends letters of a site again: those of `ids`, or all of `reason`, the oldest first. One that cannot be stored stays a letter, with the reason it has now. */
export async function sendAgain(
	pool: Pool,
	input: {
		siteId: number;
		ids?: readonly number[] | undefined;
		reason?: string | undefined;
		/** Only letters after this one: where the request before ended. */
		after?: number | undefined;
		actor: AuditActor;
		ip: string | null;
		now: number;
	},
): Promise<SentAgain> {
	return inTransaction(pool, async (db, client) => {
		const letters = await client.query<Letter>(
			`SELECT id, reason, row FROM dead_letters WHERE site_id = $1 AND resolved_at IS NULL AND ($2::bigint[] IS NULL OR id = ANY($2)) AND ($3::text IS NULL OR reason = $3)
				AND id > $4 ORDER BY id LIMIT ${MOST_LETTERS} FOR UPDATE`,
			[input.siteId, input.ids ?? null, input.reason ?? null, input.after ?? 0],
		);
		const { stored, duplicates, refusals } = await store(client, input.siteId, letters.rows, input.now);
		await close(client, letters.rows, refusals);
		const refused: Record<string, number> = {};
		for (const reason of refusals.values()) refused[reason] = (refused[reason] ?? 0) + 1;
		const lastId = letters.rows.at(-1)?.id ?? null;
		const left = lastId === null ? 0 : await countLeft(client, input, lastId);
		if (letters.rows.length > 0)
			await recordAudit(db, {
				siteId: input.siteId,
				actor: input.actor,
				ip: input.ip,
				action: 'dead-letters.sent-again',
				subjectKind: 'dead-letters',
				subjectName: input.reason ?? `${letters.rows.length} of the readings set aside`,
				before: { letters: letters.rows.length, first_id: letters.rows[0]?.id, last_id: letters.rows.at(-1)?.id },
				after: { stored: stored.length, duplicates, refused },
			});
		// Positions are given as the last act before commit.
		if (stored.length > 0) {
			const readings = stored.map(journalReadingOf);
			const positions = await appendJournal(client, new Map([[input.siteId, { readings, events: [] }]]), input.now);
			for (const [site, position] of positions)
				await client.query("SELECT pg_notify('millrace_feed', $1)", [`${site}:${position}`]);
		}
		return { stored: stored.length, duplicates, refused, left, last_id: lastId };
	});
}

/** Stores what can be; the others by letter, with their reason now. */
async function store(
	client: Client,
	siteId: number,
	letters: readonly Letter[],
	now: number,
): Promise<{ stored: StoredReading[]; duplicates: number; refusals: Map<number, string> }> {
	const refusals = new Map<number, string>();
	const letterOf = new Map<StoredReading, number>();
	for (const { id, reason, row } of letters) {
		const reading = readingOfLetter(siteId, reason, row);
		if (reading) letterOf.set(reading, id);
		else refusals.set(id, 'unreadable');
	}
	const own = await client.query<{ id: number }>('SELECT id FROM tags WHERE site_id = $1', [siteId]);
	const isOwn = new Set(own.rows.map((row) => row.id));
	const known: StoredReading[] = [];
	for (const [reading, id] of letterOf) {
		if (!isOwn.has(reading.tagId)) refusals.set(id, 'tag-unknown');
		else if (reading.at > now + AHEAD_MS) refusals.set(id, 'time-out-of-range');
		else known.push(reading);
	}
	const longest = await longestRawDays(client);
	await ensureJournalDay(client, now);
	// Days that maintenance never made, none beyond what is kept; the database itself leaves closed days out.
	const kept = known.filter((one) => one.at > rawEdgeOf(now, longest));
	for (const day of new Set(kept.map((one) => Math.floor(one.at / DAY_MS)))) await ensureReadingDay(client, day * DAY_MS);
	const outcome = await storeReadings(client, known, now, true);
	for (const { reading, reason } of outcome.dead) refusals.set(letterOf.get(reading) ?? 0, reason);
	return { ...outcome, refusals };
}

async function close(client: Client, letters: readonly Letter[], refusals: ReadonlyMap<number, string>): Promise<void> {
	await client.query('UPDATE dead_letters SET resolved_at = now() WHERE id = ANY($1)', [
		letters.filter(({ id }) => !refusals.has(id)).map(({ id }) => id),
	]);
	await client.query(
		'UPDATE dead_letters d SET reason = g.reason FROM unnest($1::bigint[], $2::text[]) AS g (id, reason) WHERE d.id = g.id AND d.reason <> g.reason',
		[[...refusals.keys()], [...refusals.values()]],
	);
}

async function countLeft(
	client: Client,
	input: { siteId: number; ids?: readonly number[] | undefined; reason?: string | undefined },
	after: number,
): Promise<number> {
	const left = await client.query<{ n: number }>(
		`SELECT count(*) AS n FROM dead_letters WHERE site_id = $1 AND resolved_at IS NULL AND id > $2 AND ($3::bigint[] IS NULL OR id = ANY($3)) AND ($4::text IS NULL OR reason = $4)`,
		[input.siteId, after, input.ids ?? null, input.reason ?? null],
	);
	return left.rows[0]?.n ?? 0;
}
