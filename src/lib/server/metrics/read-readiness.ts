// Edge: metrics. May touch: prom-client, the web pool (select only), the host's time service.
import { existsSync } from 'node:fs';
import type { Pool } from '#lib/server/db/pool.ts';
import journal from '../../../../drizzle/meta/_journal.json' with { type: 'json' };

export interface Check {
	ok: boolean;
	detail: string;
}
export interface Readiness {
	status: 'ready' | 'not-ready';
	checks: { database: Check; migrations: Check; collector: Check; clock: Check };
}

const UNKNOWN: Check = { ok: false, detail: 'unknown: the database does not answer' };

/** Whether the database answers, is at this version's schema, a collector was heard of within 10 s, and the clock is not known to be wrong. */
export async function readReadiness(pool: Pool): Promise<Readiness> {
	const checks: Readiness['checks'] = { database: UNKNOWN, migrations: UNKNOWN, collector: UNKNOWN, clock: clockCheck() };
	try {
		const heartbeat = await pool.query<{ age: number | null; last: number | null }>(
			`SELECT (SELECT extract(epoch FROM now() - max(heartbeat_at))::float8 FROM collectors) AS age,
			        (SELECT max(created_at)::float8 FROM drizzle.__drizzle_migrations) AS last`,
		);
		const { age = null, last = null } = heartbeat.rows[0] ?? {};
		checks.database = { ok: true, detail: 'answers' };
		const wanted = Math.max(...journal.entries.map((entry) => entry.when));
		const isMigrated = last !== null && last >= wanted;
		checks.migrations = {
			ok: isMigrated,
			detail: isMigrated ? 'done' : 'older than this version: run npm start, which migrates',
		};
		checks.collector =
			age === null
				? { ok: false, detail: 'none has been heard of' }
				: { ok: age < 10, detail: `last heard of ${age.toFixed(1)} s ago` };
	} catch (error) {
		checks.database = { ok: false, detail: (error as Error).message };
	}
	const isReady = Object.values(checks).every((check) => check.ok);
	return { status: isReady ? 'ready' : 'not-ready', checks };
}

/** What systemd's time service says; with any other service, or none, nothing is known. */
function clockCheck(): Check {
	if (existsSync('/run/systemd/timesync/synchronized')) return { ok: true, detail: 'synchronised' };
	if (existsSync('/run/systemd/timesync')) return { ok: false, detail: 'not synchronised: look at timedatectl' };
	return { ok: true, detail: 'unknown' };
}
