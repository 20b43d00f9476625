// Edge: outbox. May touch: outbox table (claimed with skip locked), mail, HTTP out.
import type { Pool } from '#lib/server/db/pool.ts';

/** A claimed message comes up again after this if whoever claimed it died; longer than any channel's own time-out in deliver.ts. */
export const CLAIM_S = 120;

export interface Claimed {
	id: number;
	channel: string;
	target: string;
	payload: Record<string, unknown>;
	/** This try included. */
	attempts: number;
}

/** Takes due messages for this process alone; others that ask at the same moment get the next ones. */
export async function claimDue(pool: Pool, channels: readonly string[], most: number): Promise<Claimed[]> {
	const claimed = await pool.query<Claimed>(
		`UPDATE outbox SET attempts = attempts + 1, next_at = now() + make_interval(secs => $3)
		 WHERE id IN (
			SELECT id FROM outbox WHERE state = 'waiting' AND next_at <= now() AND channel = ANY($1)
			ORDER BY next_at LIMIT $2 FOR UPDATE SKIP LOCKED
		 ) RETURNING id, channel, target, payload, attempts`,
		[channels, most, CLAIM_S],
	);
	return claimed.rows;
}
