// Edge: store. May touch: dead-letter table, in the caller's transaction. What could not be stored, kept with its reason, and read back as a reading.
import { z } from 'zod';
import { REASONS } from '#lib/domain/reason.ts';
import type { Client } from '#lib/server/db/pool.ts';
import type { Dead } from './store-readings.ts';
import type { StoredReading } from './write-batch.ts';

/** Keeps what could not be stored. */
export async function keepDeadLetters(client: Client, dead: readonly Dead[]): Promise<void> {
	if (dead.length === 0) return;
	await client.query(
		`INSERT INTO dead_letters (site_id, tag_id, reason, row)
		 SELECT g.site_id, g.tag_id, g.reason, g.row FROM unnest($1::int[], $2::int[], $3::text[], $4::jsonb[]) AS g (site_id, tag_id, reason, row)`,
		[
			dead.map(({ reading }) => reading.siteId),
			dead.map(({ reading }) => (isInt4(reading.tagId) ? reading.tagId : null)),
			dead.map(({ reason }) => reason),
			dead.map(({ reading }) => JSON.stringify(printable(reading))),
		],
	);
}

const isInt4 = (value: number) => Number.isInteger(value) && Math.abs(value) < 2_147_483_648;

function printable(reading: StoredReading): Record<string, unknown> {
	const text = (value: string | null) => value?.replaceAll('\u0000', '\\u0000') ?? null;
	const number = (value: number | null) => (value === null || Number.isFinite(value) ? value : String(value));
	return {
		...reading,
		at: number(reading.at),
		value: number(reading.value),
		raw: reading.raw === null ? null : text(String(reading.raw)),
		rawKept: text(reading.rawKept),
		wire: text(reading.wire),
	};
}

/** A number, or the word for one that JSON does not know. */
const number = z.union([z.number(), z.enum(['NaN', 'Infinity', '-Infinity']).transform(Number)]);
const letter = z.object({
	tagId: number,
	at: number,
	value: number.nullable(),
	quality: z.number(),
	timeFrom: z.enum(['source', 'hub']),
	receivedAt: z.number(),
	sourceAt: z.number().nullable(),
	reason: z.enum(REASONS).nullable(),
	rawKept: z.string().nullable(),
	revision: z.int(),
});

/** The reading of a dead letter; null where it holds none that this version can read. `siteId` is the letter's own, whatever stands inside. */
export function readingOfLetter(siteId: number, reason: string, row: unknown): StoredReading | null {
	const parsed = letter.safeParse(row);
	if (!parsed.success) return null;
	// Letters of earlier versions lost the word: JSON writes null for what is not a number.
	const value = reason === 'not-a-number' && parsed.data.value === null ? Number.NaN : parsed.data.value;
	return { ...parsed.data, value, siteId, raw: null, wire: null };
}
