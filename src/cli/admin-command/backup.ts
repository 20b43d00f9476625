// Edge: cli. May touch: child processes (pg_dump, pg_restore, psql), the backup file.
import { spawn, spawnSync } from 'node:child_process';
import { existsSync, mkdirSync, mkdtempSync, renameSync, rmSync, statSync, writeFileSync } from 'node:fs';
import { tmpdir } from 'node:os';
import { dirname, join, resolve } from 'node:path';
import { pipeline } from 'node:stream/promises';
import { readConfig } from '#lib/server/config.ts';
import { migrateDatabase } from '#lib/server/db/migrate.ts';
import { createDb } from '#lib/server/db/pool.ts';
import { recordAudit } from '#lib/server/audit/record.ts';
import { findPostgres, Refusal } from '../bootstrap.js';
import { findOwnerDatabase } from '../cluster.ts';
import { consoleActor, type Command } from './command.ts';

/** A program of PostgreSQL's, and the environment that carries the address: an argument would show the password to others. */
async function programs(): Promise<{ at(name: string): string; env: NodeJS.ProcessEnv; ownerUrl: string }> {
	const bin = findPostgres();
	if (!bin) throw new Refusal("PostgreSQL's programs are missing: apt-get install postgresql-client.");
	const ownerUrl = await findOwnerDatabase();
	if (!ownerUrl) throw new Refusal('No database answers: start Millrace with npm start, or set DATABASE_URL, then try again.');
	const url = new URL(ownerUrl);
	const env = {
		...process.env,
		PGHOST: url.hostname,
		PGPORT: url.port || '5432',
		PGUSER: decodeURIComponent(url.username),
		PGPASSWORD: decodeURIComponent(url.password),
		PGDATABASE: decodeURIComponent(url.pathname.slice(1)),
		PGOPTIONS: '-c timezone=UTC',
	};
	return { at: (name) => join(bin, name), env, ownerUrl };
}

function lastLines(text: string): string {
	return text.trim().split('\n').slice(-3).join('\n  ');
}

export const backup: Command = {
	about: 'Writes the whole database into one file, while everything runs.',
	options: { file: 'Where to; a dated file in the data folder unless given.' },
	async run({ options, pool }) {
		const { at, env } = await programs();
		const stamp = new Date().toISOString().replace(/[-:]/g, '').replace(/\.\d+/, '');
		const file = resolve(options.file ?? join(readConfig().dataFolder, 'backups', `millrace-${stamp}.dump`));
		if (existsSync(file)) throw new Refusal(`${file} is there already: choose another file, nothing is overwritten.`);
		mkdirSync(dirname(file), { recursive: true });
		const partial = `${file}.partial`;
		const result = spawnSync(at('pg_dump'), ['--format=custom', '--compress=6', '--no-owner', '--file', partial], {
			env,
			encoding: 'utf8',
		});
		if (result.status !== 0) {
			rmSync(partial, { force: true });
			throw new Refusal(`pg_dump failed:\n  ${lastLines(result.stderr)}`);
		}
		// The name stands only for a whole file.
		renameSync(partial, file);
		const bytes = statSync(file).size;
		await recordAudit(createDb(await pool()), {
			siteId: null,
			actor: consoleActor(),
			ip: null,
			action: 'backup.written',
			subjectKind: 'installation',
			after: { file, bytes },
		});
		return { text: `Wrote ${file} (${(bytes / 1_048_576).toFixed(1)} MiB).`, json: { file, bytes } };
	},
};

/** Before the backup's own statements: nothing of the present database may stay, newer tables included. */
const BEFORE = `
DROP SCHEMA IF EXISTS public CASCADE;
DROP SCHEMA IF EXISTS drizzle CASCADE;
CREATE SCHEMA public;
DO $$ BEGIN IF NOT EXISTS (SELECT FROM pg_roles WHERE rolname = 'millrace_app') THEN CREATE ROLE millrace_app NOLOGIN; END IF; END $$;
`;

/** After them: rights of tables to come, and a new epoch, so that cursors of the time before the restore are refused. */
const AFTER = `
SET search_path = public;
GRANT USAGE ON SCHEMA public TO millrace_app;
ALTER DEFAULT PRIVILEGES IN SCHEMA public GRANT SELECT, INSERT, UPDATE, DELETE ON TABLES TO millrace_app;
ALTER DEFAULT PRIVILEGES IN SCHEMA public GRANT USAGE, SELECT ON SEQUENCES TO millrace_app;
UPDATE installation SET epoch = gen_random_uuid();
DELETE FROM sessions;
UPDATE source_leases SET owner = NULL, until = now();
`;

export const restore: Command = {
	about: 'Replaces the whole database by a backup, all or nothing. Feeds begin a new epoch, everybody signs in again.',
	options: { file: 'The backup; or as the word after the command.' },
	flags: { yes: 'Without it the command only says what it would do.' },
	words: '[FILE]',
	async run({ options, flags, words }) {
		const named = options.file ?? words[0];
		if (named === undefined) throw new Refusal('restore needs the backup: npm run admin -- restore FILE --yes.');
		const file = resolve(named);
		if (!existsSync(file)) throw new Refusal(`${file} is not there.`);
		const { at, env, ownerUrl } = await programs();
		const listed = spawnSync(at('pg_restore'), ['--list', file], { env, encoding: 'utf8', maxBuffer: 256 * 1024 * 1024 });
		if (listed.status !== 0) throw new Refusal(`${file} is not a backup that pg_restore reads:\n  ${lastLines(listed.stderr)}`);
		if (!/ TABLE public installation /.test(listed.stdout))
			throw new Refusal(`${file} is a backup of something else: it holds no Millrace installation.`);
		if (!flags.has('yes')) {
			throw new Refusal(
				`This replaces everything in the database ${env.PGDATABASE} at ${env.PGHOST}:${env.PGPORT} by ${file}. Again with --yes to do it.`,
			);
		}
		const folder = mkdtempSync(join(tmpdir(), 'millrace-restore-'));
		try {
			// Default rights are written for the owner's name of then, which may be another now; AFTER gives them anew.
			const list = join(folder, 'list');
			const kept = listed.stdout
				.split('\n')
				.filter((line) => !/ DEFAULT ACL | SCHEMA - public | ACL - SCHEMA public /.test(line));
			writeFileSync(list, kept.join('\n'));
			await replay(at, env, file, list);
		} finally {
			rmSync(folder, { recursive: true, force: true });
		}
		await migrateDatabase(ownerUrl, 'drizzle');
		const told = spawnSync(
			at('psql'),
			['-X', '-q', '-v', 'ON_ERROR_STOP=1', '-v', `actor=${consoleActor().name}`, '-v', `file=${file}`],
			{
				env,
				encoding: 'utf8',
				input: `INSERT INTO audit_entries (actor_kind, actor_name, action, subject_kind, note) VALUES ('command', :'actor', 'backup.restored', 'installation', :'file');
SELECT pg_terminate_backend(pid) FROM pg_stat_activity WHERE datname = current_database() AND pid <> pg_backend_pid() AND application_name LIKE 'millrace-%';\n`,
			},
		);
		if (told.status !== 0)
			throw new Refusal(`The backup is restored, but the log of changes does not say so:\n  ${lastLines(told.stderr)}`);
		return {
			text: `Restored ${file}. Restart Millrace (Ctrl-C, then npm start) so that collectors take it up.`,
			json: { file, restored: true },
		};
	},
};

/** Runs the backup's statements between BEFORE and AFTER in one transaction. */
async function replay(at: (name: string) => string, env: NodeJS.ProcessEnv, file: string, list: string): Promise<void> {
	const reader = spawn(at('pg_restore'), ['--no-owner', '--use-list', list, '--file', '-', file], {
		env,
		stdio: ['ignore', 'pipe', 'pipe'],
	});
	const writer = spawn(at('psql'), ['-X', '-q', '-1', '-v', 'ON_ERROR_STOP=1', '-f', '-'], {
		env,
		stdio: ['pipe', 'ignore', 'pipe'],
	});
	let complaints = '';
	for (const stream of [reader.stderr, writer.stderr]) stream.on('data', (chunk: Buffer) => (complaints += chunk.toString()));
	const ended = (child: typeof reader | typeof writer) => new Promise<number | null>((done) => child.once('close', done));
	const [readerEnded, writerEnded] = [ended(reader), ended(writer)];
	writer.stdin.write(BEFORE);
	try {
		await pipeline(reader.stdout, writer.stdin, { end: false });
		// Half a backup must not be committed: without its end psql would take what came for everything.
		if ((await readerEnded) !== 0) {
			writer.kill();
			throw new Refusal(`pg_restore failed; nothing was changed:\n  ${lastLines(complaints)}`);
		}
		writer.stdin.end(AFTER);
	} catch (error) {
		await writerEnded;
		if (error instanceof Refusal) throw error;
		throw new Refusal(
			`The backup could not be restored; nothing was changed:\n  ${lastLines(complaints) || (error as Error).message}`,
		);
	}
	if ((await writerEnded) !== 0)
		throw new Refusal(`The backup could not be restored; nothing was changed:\n  ${lastLines(complaints)}`);
}
