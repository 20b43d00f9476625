// Edge: collector. The second process: wires sources, pipeline and store; decides nothing.
import { randomUUID } from 'node:crypto';
import { existsSync, mkdirSync, readFileSync, writeFileSync } from 'node:fs';
import { hostname } from 'node:os';
import { join } from 'node:path';
import { createSource } from '#lib/pipeline/sources/create-source.ts';
import { createCopyWriter } from '#lib/pipeline/store/copy-writer.ts';
import { ensurePartitionsAhead } from '#lib/pipeline/store/partitions.ts';
import { Spool } from '#lib/pipeline/store/spool.ts';
import { LossLedger } from '#lib/pipeline/loss-ledger.ts';
import { Pipeline } from '#lib/pipeline/pipeline.ts';
import { readConfig } from '#lib/server/config.ts';
import { createPool } from '#lib/server/db/pool.ts';
import { log } from '#lib/server/log.ts';
import { listenFor } from './bell.ts';
import { CollectorCache } from './cache.ts';
import { syncTrusted } from './certificate-store.ts';
import { registerCollector, type Owner } from './lease.ts';
import { startRollUps } from './roll-ups.ts';
import { Supervisor } from './supervisor.ts';

process.title = 'millrace-collector';

/** Id of this data folder, made once: an own collector that was killed takes its leases over at once by it. */
function folderId(dataFolder: string): string {
	mkdirSync(dataFolder, { recursive: true });
	const file = join(dataFolder, 'collector-id');
	if (!existsSync(file)) writeFileSync(file, randomUUID(), { mode: 0o600 });
	return readFileSync(file, 'utf8').trim();
}

async function main(): Promise<void> {
	const config = readConfig();
	if (!config.databaseUrl) throw new Error('DATABASE_URL is not set: start with `npm start`, or `npm run collector` beside it');
	const pool = createPool(config.databaseUrl, { name: 'millrace-collector', max: 8, statementTimeoutMs: 60_000 });
	const folder = folderId(config.dataFolder);
	const owner: Owner = { id: randomUUID(), instance: `${folder}/${config.collectorName}` };
	const now = () => Date.now();
	const file = (kind: string) => join(config.dataFolder, 'collector', `${config.collectorName}.${kind}.db`);
	const spool = new Spool({ path: file('spool'), ...config.spool, now }, new LossLedger());
	const cache = new CollectorCache(file('cache'), now());
	let installation = cache.read('installation');
	const register = async () => {
		await ensurePartitionsAhead(pool, now());
		await registerCollector(pool, owner, hostname(), process.pid);
		installation = (await pool.query<{ uid: string }>('SELECT uid FROM installation')).rows[0]?.uid ?? null;
		if (installation) cache.save('installation', installation);
	};
	const pkiFolder = join(config.dataFolder, 'pki');
	const writer = createCopyWriter(pool, { now });
	const pipeline = new Pipeline(writer, now, { spool, remember: (tags) => cache.remember(tags) });
	const supervisor = new Supervisor({
		pool,
		pipeline,
		owner,
		now,
		cache,
		register,
		prepare: () => syncTrusted(pool, pkiFolder),
		create: async (plan, counts) => {
			if (!pipeline.isDown) await syncTrusted(pool, pkiFolder).catch(() => undefined);
			return createSource(
				{ id: plan.id, kind: plan.kind, settings: plan.settings },
				{ observer: counts, pkiFolder, installationId: installation ?? 'unknown', now },
			);
		},
	});
	const stopListening = listenFor(
		pool,
		['millrace_map', 'millrace_sources', 'millrace_limits', 'millrace_requests'],
		() => void supervisor.look(),
	);
	// Signals are heeded before leases are taken, so that a stop in the middle of the start gives them back too.
	const started = supervisor.start();
	const stopRollUps = startRollUps(pool, now);
	let isStopping = false;
	const stop = async () => {
		if (isStopping) process.exit(1);
		isStopping = true;
		stopListening();
		await started.catch(() => undefined);
		await supervisor.stop();
		await writer.close();
		await stopRollUps();
		await pool.end();
		process.exit(0);
	};
	for (const signal of ['SIGTERM', 'SIGINT'] as const) process.on(signal, () => void stop());
	await started;
	log.info({ instance: owner.instance }, 'the collector runs');
}

process.on('unhandledRejection', (error) => log.error({ err: error }, 'a promise was left alone'));
main().catch((error: unknown) => {
	log.fatal({ err: error }, 'the collector could not start');
	process.stderr.write(`${(error as Error).message}\n`);
	process.exitCode = 1;
	setTimeout(() => process.exit(1), 100);
});
