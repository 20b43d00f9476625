// Tests. A throwaway PostgreSQL cluster for the run, and a clone of a migrated template for each file.
import { execFileSync, spawnSync } from 'node:child_process';
import { chownSync, existsSync, mkdirSync, mkdtempSync, readdirSync, rmSync, writeFileSync } from 'node:fs';
import { createServer } from 'node:net';
import { tmpdir, userInfo } from 'node:os';
import { join } from 'node:path';
import pg from 'pg';
import { migrateDatabase } from '#lib/server/db/migrate.ts';

/** Folder of the newest installed PostgreSQL's programs. */
export function postgresBin(): string {
	const root = '/usr/lib/postgresql';
	const versions = existsSync(root) ? readdirSync(root).sort((a, b) => Number(b) - Number(a)) : [];
	const found = versions.map((version) => join(root, version, 'bin')).find((bin) => existsSync(join(bin, 'initdb')));
	if (!found) throw new Error('PostgreSQL is not installed: run `npm test`, which installs it, or apt-get install postgresql');
	return found;
}

/** A port that nothing listens on just now. */
export async function freePort(): Promise<number> {
	return new Promise((resolve, reject) => {
		const server = createServer();
		server.once('error', reject);
		server.listen(0, '127.0.0.1', () => {
			const { port } = server.address() as { port: number };
			server.close(() => resolve(port));
		});
	});
}

export interface Cluster {
	/** Owner's address without a database name: append `/name`. */
	url: string;
	port: number;
	folder: string;
	/** `pg_ctl stop -m immediate` and `start`, for tests that take PostgreSQL away. */
	stop(mode?: 'fast' | 'immediate'): void;
	start(): void;
	remove(): void;
}

/** A fresh cluster on a free port; fsync off, which only tests may do. */
export async function createCluster(): Promise<Cluster> {
	const bin = postgresBin();
	const parent = mkdtempSync(join(tmpdir(), 'millrace-test-'));
	const folder = join(parent, 'pg');
	mkdirSync(folder);
	const isRoot = userInfo().uid === 0;
	if (isRoot) {
		const uid = Number(execFileSync('id', ['-u', 'postgres']).toString());
		const gid = Number(execFileSync('id', ['-g', 'postgres']).toString());
		chownSync(parent, uid, gid);
		chownSync(folder, uid, gid);
	}
	const run = (program: string, args: string[]) => {
		const command = isRoot ? 'runuser' : join(bin, program);
		const all = isRoot ? ['-u', 'postgres', '--', join(bin, program), ...args] : args;
		const result = spawnSync(command, all, { cwd: '/', stdio: ['ignore', 'ignore', 'pipe'] });
		if (result.status !== 0) throw new Error(`${program} failed: ${result.stderr?.toString()}`);
	};
	run('initdb', ['-D', folder, '-U', 'owner', '-A', 'trust', '--locale=C.UTF-8', '-E', 'UTF8', '--no-sync']);
	const port = await freePort();
	const settings = [
		`port = ${port}`,
		"listen_addresses = '127.0.0.1'",
		"unix_socket_directories = ''",
		'fsync = off',
		'synchronous_commit = off',
		'full_page_writes = off',
		'shared_buffers = 256MB',
		'max_connections = 200',
		'max_wal_size = 2GB',
	].join('\n');
	writeFileSync(join(folder, 'postgresql.auto.conf'), `${settings}\n`);
	const start = () => run('pg_ctl', ['-D', folder, '-w', '-l', join(parent, 'log'), 'start']);
	const stop = (mode: 'fast' | 'immediate' = 'immediate') => run('pg_ctl', ['-D', folder, '-w', '-m', mode, 'stop']);
	start();
	return {
		url: `postgres://owner@127.0.0.1:${port}`,
		port,
		folder,
		stop,
		start,
		remove: () => {
			try {
				stop();
			} finally {
				rmSync(parent, { recursive: true, force: true });
			}
		},
	};
}

export const TEMPLATE = 'millrace_template';

/** Migrates the template once; `cloneDatabase` copies it. */
export async function createTemplate(cluster: Pick<Cluster, 'url'>): Promise<void> {
	const admin = new pg.Client({ connectionString: `${cluster.url}/postgres` });
	await admin.connect();
	await admin.query(`CREATE DATABASE ${TEMPLATE}`);
	await admin.end();
	await migrateDatabase(`${cluster.url}/${TEMPLATE}`, 'drizzle');
}

let serial = 0;

/** A migrated database of the test file's own; answers its address. `drop` fails while a client is still open. */
export async function cloneDatabase(clusterUrl = process.env.TEST_CLUSTER_URL): Promise<{ url: string; drop(): Promise<void> }> {
	if (!clusterUrl)
		throw new Error('TEST_CLUSTER_URL is not set: database tests run through the vitest projects that start a cluster');
	serial += 1;
	const name = `t_${process.pid}_${Date.now().toString(36)}_${serial}`;
	const admin = new pg.Client({ connectionString: `${clusterUrl}/postgres` });
	await admin.connect();
	// Only one clone of a template at a time; parallel files wait here.
	await admin.query('SELECT pg_advisory_lock(1)');
	await admin.query(`CREATE DATABASE ${name} TEMPLATE ${TEMPLATE}`);
	await admin.end();
	return {
		url: `${clusterUrl}/${name}`,
		async drop() {
			const client = new pg.Client({ connectionString: `${clusterUrl}/postgres` });
			await client.connect();
			try {
				// Closing a pool is not quite instant on the server's side.
				for (let tries = 0; ; tries += 1) {
					const open = await client.query('SELECT count(*)::int AS n FROM pg_stat_activity WHERE datname = $1', [name]);
					if (open.rows[0].n === 0) break;
					if (tries > 40) throw new Error(`${open.rows[0].n} database clients are still open at the end of the test file`);
					await new Promise((resolve) => setTimeout(resolve, 50));
				}
			} finally {
				await client.query(`DROP DATABASE ${name} WITH (FORCE)`);
				await client.end();
			}
		},
	};
}
