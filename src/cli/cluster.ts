// Edge: cli. May touch: child processes, the data folder. The private PostgreSQL cluster on loopback.
import { type ChildProcess, execFileSync, spawn, spawnSync } from 'node:child_process';
import { createHash, randomBytes } from 'node:crypto';
import { accessSync, chmodSync, chownSync, constants, existsSync, mkdirSync, readFileSync, rmSync, writeFileSync } from 'node:fs';
import { dirname, join } from 'node:path';
import { userInfo } from 'node:os';
import pg from 'pg';
import { readConfig } from '#lib/server/config.ts';
import { findPostgres, Refusal } from './bootstrap.js';

/** Addresses of the private cluster: `app` runs the product, `owner` migrates. */
export interface ClusterAddresses {
	app: string;
	owner: string;
}

interface Secrets {
	owner: string;
	app: string;
	/** Where the cluster's files are, when not in the data folder itself. */
	folder: string;
}

/** The user that PostgreSQL runs as when we are root: it refuses to run as root. */
function postgresUser(): { uid: number; gid: number } | null {
	if (userInfo().uid !== 0) return null;
	try {
		return { uid: Number(execFileSync('id', ['-u', 'postgres'])), gid: Number(execFileSync('id', ['-g', 'postgres'])) };
	} catch {
		throw new Refusal(
			'PostgreSQL will not run as root and there is no user "postgres": install the Debian package postgresql, or start as an ordinary user.',
		);
	}
}

/** True when every folder above can be entered by that user. */
function canReach(folder: string, user: { uid: number; gid: number }): boolean {
	return spawnSync('test', ['-x', folder], { uid: user.uid, gid: user.gid, cwd: '/' }).status === 0;
}

/** Where the cluster lives: in the data folder, or, when root's folder is closed to `postgres`, under /var/lib. */
function placeOf(dataFolder: string, user: { uid: number; gid: number } | null): string {
	const inside = join(dataFolder, 'pg');
	if (!user || canReach(dataFolder, user)) return inside;
	const outside = join('/var/lib/millrace', createHash('sha256').update(dataFolder).digest('hex').slice(0, 12), 'pg');
	console.error(`The user "postgres" cannot enter ${dataFolder}; PostgreSQL's files go to ${outside}`);
	return outside;
}

const secretsFile = (dataFolder: string) => join(dataFolder, 'cluster.json');

function readSecrets(dataFolder: string): Secrets | null {
	const file = secretsFile(dataFolder);
	return existsSync(file) ? (JSON.parse(readFileSync(file, 'utf8')) as Secrets) : null;
}

function addressesOf(secrets: Secrets, port: number): ClusterAddresses {
	const at = `127.0.0.1:${port}/millrace`;
	return { app: `postgres://millrace_app:${secrets.app}@${at}`, owner: `postgres://millrace:${secrets.owner}@${at}` };
}

/** Address of the database of a running `npm start` on this data folder, or `DATABASE_URL`; null when there is none. */
export async function findRunningDatabase(): Promise<string | null> {
	const config = readConfig();
	if (config.databaseUrl) return config.databaseUrl;
	const secrets = readSecrets(config.dataFolder);
	if (!secrets) return null;
	const url = addressesOf(secrets, config.pgPort).app;
	return (await answers(url)) ? url : null;
}

/** The owner's address, for restore and migrations; null when nothing runs. */
export async function findOwnerDatabase(): Promise<string | null> {
	const config = readConfig();
	if (config.databaseUrl) return config.databaseUrl;
	const secrets = readSecrets(config.dataFolder);
	return secrets ? addressesOf(secrets, config.pgPort).owner : null;
}

async function answers(url: string): Promise<boolean> {
	const client = new pg.Client({ connectionString: url, connectionTimeoutMillis: 2_000 });
	try {
		await client.connect();
		await client.query('SELECT 1');
		return true;
	} catch {
		return false;
	} finally {
		await client.end().catch(() => undefined);
	}
}

/** Makes the cluster when there is none, and prepares its settings. Answers how to run it; the caller supervises the process. */
export function prepareCluster(
	dataFolder: string,
	port: number,
): { addresses: ClusterAddresses; folder: string; run(): ChildProcess; isRunning(): boolean; stopStray(): void } {
	const bin = findPostgres();
	if (!bin)
		throw new Refusal('PostgreSQL is not installed: apt-get install postgresql, or set DATABASE_URL to a database of your own.');
	const user = postgresUser();
	mkdirSync(dataFolder, { recursive: true });
	accessSync(dataFolder, constants.W_OK);
	let secrets = readSecrets(dataFolder);
	const as = user ? { uid: user.uid, gid: user.gid } : {};
	if (!secrets || !existsSync(join(secrets.folder, 'PG_VERSION'))) {
		const folder = secrets?.folder ?? placeOf(dataFolder, user);
		// A first start that was cut off leaves half a cluster; without PG_VERSION it holds nothing.
		if (existsSync(folder) && !existsSync(join(folder, 'PG_VERSION'))) rmSync(folder, { recursive: true, force: true });
		// The way there must be open to PostgreSQL's user; only the cluster itself is closed.
		mkdirSync(dirname(folder), { recursive: true, mode: 0o755 });
		mkdirSync(folder, { recursive: true, mode: 0o700 });
		chmodSync(folder, 0o700);
		secrets = { owner: randomBytes(24).toString('hex'), app: randomBytes(24).toString('hex'), folder };
		const passwordFile = join(dirname(folder), 'pw');
		writeFileSync(passwordFile, secrets.owner, { mode: 0o600 });
		if (user) {
			chownSync(folder, user.uid, user.gid);
			chownSync(passwordFile, user.uid, user.gid);
		}
		const result = spawnSync(
			join(bin, 'initdb'),
			[
				'-D',
				folder,
				'-U',
				'millrace',
				'-A',
				'scram-sha-256',
				`--pwfile=${passwordFile}`,
				'--locale=C.UTF-8',
				'-E',
				'UTF8',
				'--data-checksums',
			],
			{ ...as, cwd: '/', encoding: 'utf8' },
		);
		rmSync(passwordFile, { force: true });
		if (result.status !== 0)
			throw new Refusal(
				`PostgreSQL's initdb failed in ${folder}:\n  ${(result.stderr || String(result.error)).trim().split('\n').slice(-3).join('\n  ')}`,
			);
		writeFileSync(secretsFile(dataFolder), JSON.stringify(secrets), { mode: 0o600 });
	}
	const { folder } = secrets;
	const major = readFileSync(join(folder, 'PG_VERSION'), 'utf8').trim();
	if (!bin.includes(`/${major}/`) && !existsSync(`/usr/lib/postgresql/${major}/bin/postgres`)) {
		throw new Refusal(
			`The data in ${folder} is of PostgreSQL ${major}, which is not installed: apt-get install postgresql-${major}.`,
		);
	}
	const ownBin = existsSync(`/usr/lib/postgresql/${major}/bin/postgres`) ? `/usr/lib/postgresql/${major}/bin` : bin;
	const settings = [
		`port = ${port}`,
		"listen_addresses = '127.0.0.1'",
		"unix_socket_directories = ''",
		"timezone = 'UTC'",
		"log_timezone = 'UTC'",
		'max_connections = 100',
		'shared_buffers = 256MB',
		'max_wal_size = 2GB',
		'wal_compression = lz4',
		"default_toast_compression = 'lz4'",
		'checkpoint_timeout = 10min',
		'log_min_messages = warning',
	];
	writeFileSync(join(folder, 'millrace.conf'), `${settings.join('\n')}\n`);
	const main = join(folder, 'postgresql.conf');
	if (!readFileSync(main, 'utf8').includes("include_if_exists = 'millrace.conf'")) {
		writeFileSync(main, `${readFileSync(main, 'utf8')}\ninclude_if_exists = 'millrace.conf'\n`);
	}
	if (user) chownSync(join(folder, 'millrace.conf'), user.uid, user.gid);
	const postmaster = () => {
		const file = join(folder, 'postmaster.pid');
		if (!existsSync(file)) return null;
		const pid = Number(readFileSync(file, 'utf8').split('\n')[0]);
		try {
			return readFileSync(`/proc/${pid}/cmdline`, 'utf8').includes(folder) ? pid : null;
		} catch {
			return null;
		}
	};
	return {
		addresses: addressesOf(secrets, port),
		folder,
		isRunning: () => postmaster() !== null,
		// Left behind by a start that was killed: end it in order, so that this start has its own child.
		stopStray: () => {
			if (postmaster() !== null)
				spawnSync(join(ownBin, 'pg_ctl'), ['-D', folder, '-w', '-m', 'fast', 'stop'], { ...as, cwd: '/' });
		},
		run: () =>
			spawn(join(ownBin, 'postgres'), ['-D', folder], {
				...as,
				cwd: '/',
				// Its own group: Ctrl-C in the terminal must not stop it before the processes that still write to it.
				detached: true,
				stdio: ['ignore', 'ignore', 'pipe'],
			}),
	};
}

/** Waits until the cluster answers; makes the product's database and gives the application's role its password. */
export async function prepareDatabase(addresses: ClusterAddresses, dataFolder: string): Promise<void> {
	const secrets = readSecrets(dataFolder);
	if (!secrets) throw new Error('the cluster has no secrets yet');
	const admin = addresses.owner.replace(/\/millrace$/, '/postgres');
	const deadline = Date.now() + 60_000;
	for (;;) {
		const client = new pg.Client({ connectionString: admin, connectionTimeoutMillis: 2_000 });
		try {
			await client.connect();
			const found = await client.query("SELECT 1 FROM pg_database WHERE datname = 'millrace'");
			if (found.rowCount === 0) await client.query('CREATE DATABASE millrace');
			await client.query(
				"DO $$ BEGIN IF NOT EXISTS (SELECT FROM pg_roles WHERE rolname = 'millrace_app') THEN CREATE ROLE millrace_app; END IF; END $$",
			);
			await client.query(`ALTER ROLE millrace_app LOGIN PASSWORD '${secrets.app}'`);
			return;
		} catch (error) {
			if (Date.now() > deadline) throw new Refusal(`PostgreSQL did not answer within 60 s: ${(error as Error).message}`);
			await new Promise((resolve) => setTimeout(resolve, 150));
		} finally {
			await client.end().catch(() => undefined);
		}
	}
}

/** Asks a database of the user's own whether it answers, in one line when it does not. */
export async function requireDatabase(url: string): Promise<void> {
	const client = new pg.Client({ connectionString: url, connectionTimeoutMillis: 5_000 });
	try {
		await client.connect();
	} catch (error) {
		const shown = url.replace(/:[^:@/]*@/, ':…@');
		throw new Refusal(
			`DATABASE_URL ${shown} does not answer (${(error as Error).message || 'no route'}): start that database or correct the address.`,
		);
	} finally {
		await client.end().catch(() => undefined);
	}
}
