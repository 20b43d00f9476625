// Edge: collector. Says what was lost, in each source's log and counts. May touch: source event and health tables.
import type { Loss, LossLedger, LossReason } from '#lib/pipeline/loss-ledger.ts';
import type { Pool } from '#lib/server/db/pool.ts';
import { log } from '#lib/server/log.ts';

const WHY: Record<LossReason, string> = {
	'spool-full': 'the database was away and the spool was full, so new samples were refused',
	'queue-full': 'the database was away and nothing could be written to the spool',
	stopped: 'the collector stopped while neither the database nor the spool took them',
	'spool-age': 'they had waited in the spool longer than it may keep them',
	'spool-broken': 'the spool could not be read any more',
	'not-sampled':
		'the collector started without the database and could not read its cache, so it sampled nothing (counted by the tags’ intervals)',
	'alarm-changes': 'the spool had no room for changes of alarms',
};

/** `3 readings between … and … were lost: why.` */
export function lossText({ reason, count, from, to }: Loss): string {
	const time = (at: number) => new Date(at).toISOString().slice(0, 19).replace('T', ' ');
	const what = reason === 'alarm-changes' ? 'changes of alarms' : 'readings';
	return `${count} ${what} between ${time(from)} and ${time(to)} UTC were lost: ${WHY[reason]}.`;
}

/** Writes every loss that is not told yet, each once; what was told is struck out of the ledger. Rejects when the database is away. */
export async function tellLosses(pool: Pool, ledger: LossLedger): Promise<boolean> {
	const losses = ledger.entries();
	for (const loss of losses) {
		if (loss.sourceId === '') {
			log.error({ readings: loss.count, reason: loss.reason }, 'readings of a source that is not known any more were lost');
		} else {
			// Told again after a kill in between, the same loss has the same time and text.
			await pool.query(
				`WITH told AS (
					INSERT INTO source_events (source_id, at, level, code, text)
					SELECT s.id, $2::timestamptz, 'error', $3::text, $4::text FROM sources s WHERE s.id = $1::uuid
						AND NOT EXISTS (SELECT FROM source_events e WHERE e.source_id = $1::uuid AND e.at = $2::timestamptz AND e.code = $3::text AND e.text = $4::text)
					RETURNING source_id)
				 INSERT INTO source_health AS h (source_id, state, dropped) SELECT source_id, 'waiting', $5::bigint FROM told
				 ON CONFLICT (source_id) DO UPDATE SET dropped = h.dropped + excluded.dropped`,
				[
					loss.sourceId,
					new Date(loss.from).toISOString(),
					`lost-${loss.reason}`,
					lossText(loss),
					loss.reason === 'alarm-changes' ? 0 : loss.count,
				],
			);
		}
		ledger.told([loss]);
	}
	return losses.length > 0;
}
