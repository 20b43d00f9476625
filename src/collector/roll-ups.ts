// Edge: collector. Keeps the roll-ups beside the readings; any collector does it, one a site at a time. May touch: store jobs.
import { rollUpSites } from '#lib/pipeline/store/roll-up-job.ts';
import type { Pool } from '#lib/server/db/pool.ts';
import { log } from '#lib/server/log.ts';

const EVERY_MS = 30_000;
/** Between two steps while there is more to do: live readings come first. */
const PAUSE_MS = 250;

/** Begins; the answer stops it and waits for the step that runs. */
export function startRollUps(pool: Pool, now: () => number): () => Promise<void> {
	let isStopped = false;
	let timer: NodeJS.Timeout | undefined;
	let running: Promise<void> = Promise.resolve();
	let isFailing = false;
	const step = async () => {
		let waitMs = EVERY_MS;
		try {
			if (await rollUpSites(pool, now())) waitMs = PAUSE_MS;
			isFailing = false;
		} catch (error) {
			// Nothing is lost: the place in the journal moves only with the rows.
			if (!isFailing) log.warn({ error: (error as Error).message }, 'the roll-ups could not be made; trying again');
			isFailing = true;
		}
		if (!isStopped) timer = setTimeout(() => (running = step()), waitMs);
	};
	timer = setTimeout(() => (running = step()), PAUSE_MS);
	return async () => {
		isStopped = true;
		clearTimeout(timer);
		await running;
	};
}
