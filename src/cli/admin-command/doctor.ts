// Edge: cli. May touch: server functions, the data folder, child processes.
import { accessSync, constants, existsSync, statfsSync } from 'node:fs';
import { readConfig } from '#lib/server/config.ts';
import { createPool, type Pool } from '#lib/server/db/pool.ts';
import { readReadiness } from '#lib/server/metrics/read-readiness.ts';
import { findPostgres } from '../bootstrap.js';
import { findRunningDatabase } from '../cluster.ts';
import type { Command } from './command.ts';

interface Finding {
	check: string;
	ok: boolean;
	detail: string;
}

/** Below this, PostgreSQL and the spool are about to stop. */
const LEAST_FREE_BYTES = 1024 ** 3;

function ofThisMachine(): Finding[] {
	const findings: Finding[] = [{ check: 'node', ok: /^v20\./.test(process.version), detail: `${process.version}, 20 expected` }];
	const bin = findPostgres();
	findings.push({
		check: 'postgresql',
		ok: bin !== null || Boolean(process.env.DATABASE_URL),
		detail: bin ?? 'its programs are not installed',
	});
	try {
		const { dataFolder } = readConfig();
		findings.push({ check: 'settings', ok: true, detail: 'valid' });
		if (!existsSync(dataFolder)) {
			findings.push({ check: 'data-folder', ok: true, detail: `${dataFolder} is not there yet; npm start makes it` });
		} else {
			accessSync(dataFolder, constants.W_OK);
			const { bavail, bsize } = statfsSync(dataFolder);
			const free = bavail * bsize;
			findings.push({
				check: 'data-folder',
				ok: free > LEAST_FREE_BYTES,
				detail: `${dataFolder}, ${(free / 1024 ** 3).toFixed(1)} GiB free`,
			});
		}
	} catch (error) {
		findings.push({ check: 'settings', ok: false, detail: (error as Error).message });
	}
	return findings;
}

async function ofTheDatabase(pool: Pool): Promise<Finding[]> {
	const { checks } = await readReadiness(pool);
	const findings = Object.entries(checks).map(([check, { ok, detail }]) => ({ check, ok, detail }));
	if (!checks.database.ok) return findings;
	const count = async (sql: string) => (await pool.query<{ n: number }>(sql)).rows[0]?.n ?? 0;
	const lost = await pool.query<{ name: string; text: string | null }>(
		`SELECT s.name, h.advice->>'text' AS text FROM source_health h JOIN sources s ON s.id = h.source_id
		 WHERE h.state = 'lost' AND s.deleted_at IS NULL AND s.enabled ORDER BY s.name`,
	);
	findings.push({
		check: 'sources',
		ok: lost.rows.length === 0,
		detail: lost.rows.length === 0 ? 'none is lost' : lost.rows.map(({ name, text }) => `${name}: ${text ?? 'lost'}`).join('; '),
	});
	const failed = await count(
		`SELECT count(*)::int AS n FROM outbox WHERE state = 'failed' OR (state = 'waiting' AND created_at < now() - interval '1 hour')`,
	);
	findings.push({
		check: 'outbox',
		ok: failed === 0,
		detail: failed === 0 ? 'nothing waits for long' : `${failed} messages failed or wait for more than an hour`,
	});
	const dead = await count('SELECT count(*)::int AS n FROM dead_letters WHERE resolved_at IS NULL');
	findings.push({
		check: 'dead-letters',
		ok: dead === 0,
		detail: dead === 0 ? 'none' : `${dead} rows were refused by the store and wait for somebody`,
	});
	const admins = await count(`SELECT count(*)::int AS n FROM users WHERE is_admin AND disabled_at IS NULL`);
	findings.push({
		check: 'administrator',
		ok: admins > 0,
		detail: admins > 0 ? `${admins}` : 'none: npm run admin -- user add --email … --name … --admin',
	});
	return findings;
}

export const doctor: Command = {
	about: 'Looks at this machine, the settings and the database, and says what is wrong.',
	options: {},
	async run() {
		const findings = ofThisMachine();
		const url = findings.some((one) => one.check === 'settings' && !one.ok) ? null : await findRunningDatabase();
		if (url) {
			const pool = createPool(url, { name: 'millrace-admin', max: 1 });
			try {
				findings.push(...(await ofTheDatabase(pool)));
			} finally {
				await pool.end();
			}
		} else {
			findings.push({ check: 'database', ok: false, detail: 'none answers: npm start, or set DATABASE_URL' });
		}
		const isBad = findings.some((finding) => !finding.ok);
		const lines = findings.map(({ check, ok, detail }) => `${ok ? 'ok   ' : 'wrong'}  ${check.padEnd(14)} ${detail}`);
		return { text: lines.join('\n'), json: { ok: !isBad, checks: findings }, isBad };
	},
};
