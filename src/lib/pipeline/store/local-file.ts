// Edge: store. May touch: SQLite files of the data folder.
import { chmodSync, closeSync, existsSync, mkdirSync, openSync, readdirSync, renameSync, rmSync } from 'node:fs';
import { basename, dirname, join } from 'node:path';
import Database from 'libsql';
import { log } from '#lib/server/log.ts';

export type LocalDatabase = InstanceType<typeof Database>;

/** Files that could not be read and were put aside: the newest are kept for somebody who wants to look. */
const MOST_ASIDE = 3;
/** A process that is just ending may hold the file this long. */
const BUSY_MS = 10_000;

/** Another process has the file open: two collectors of one name on one data folder. */
export class LocalFileBusy extends Error {}

function codeOf(error: unknown): string {
	return error instanceof Error && 'code' in error ? String(error.code) : '';
}

/** True where the file itself cannot be trusted any more; a full disk or a refused write says nothing about what is in it. */
export function isBroken(error: unknown): boolean {
	return /^SQLITE_(CORRUPT|NOTADB|FORMAT|SCHEMA|ERROR|MISMATCH)/.test(codeOf(error));
}

/**
 * Opens or makes a file of mode 0600 for this process alone. Every commit is in the file and flushed to the disk before it is said to be done
 * (WAL, synchronous=FULL): a killed process loses nothing, and neither does a power cut, which is when PostgreSQL is away most often.
 * Throws: LocalFileBusy; what SQLite says of a file that it cannot read or whose `version` is another.
 */
export function openLocalFile(path: string, version: number, schema: string): LocalDatabase {
	mkdirSync(dirname(path), { recursive: true, mode: 0o700 });
	// Made by us, so that SQLite's own files beside it inherit the mode.
	closeSync(openSync(path, 'a', 0o600));
	chmodSync(path, 0o600);
	const db = new Database(path, { timeout: BUSY_MS });
	try {
		db.pragma('locking_mode = EXCLUSIVE');
		db.pragma('journal_mode = WAL');
		db.pragma('synchronous = FULL');
		db.pragma('journal_size_limit = 8388608');
		const found = numberOf(db, 'user_version');
		if (found === 0) {
			db.exec(`BEGIN IMMEDIATE; ${schema}; PRAGMA user_version = ${version}; COMMIT`);
		} else if (found !== version) {
			throw Object.assign(new Error(`version ${found}, ${version} expected`), { code: 'SQLITE_FORMAT' });
		} else {
			// Takes the lock at once, so that a second process learns of it now.
			db.exec('BEGIN IMMEDIATE; COMMIT');
		}
		return db;
	} catch (error) {
		if (codeOf(error).startsWith('SQLITE_BUSY')) db.close();
		else closeLocalFile(db);
		if (codeOf(error).startsWith('SQLITE_BUSY'))
			throw new LocalFileBusy(`${path} is in use: another collector of this name runs on this data folder`);
		throw error;
	}
}

/**
 * Ends the use of a file. Statements that nobody uses any more keep its handle until they are collected, so the lock is given back first:
 * the same process may open the file again.
 */
export function closeLocalFile(db: LocalDatabase): void {
	try {
		db.pragma('journal_mode = DELETE');
		db.pragma('locking_mode = NORMAL');
		db.prepare('SELECT count(*) FROM sqlite_master').get();
	} catch (error) {
		log.debug({ error: (error as Error).message }, 'a file of the data folder was closed as it is');
	}
	db.close();
}

/** The number that a pragma answers. */
export function numberOf(db: LocalDatabase, pragma: string): number {
	const [row] = db.pragma(pragma) as Record<string, number>[];
	return row?.[pragma] ?? 0;
}

/** Runs `work` as one transaction. */
export function atOnce<T>(db: LocalDatabase, work: () => T): T {
	db.exec('BEGIN IMMEDIATE');
	try {
		const found = work();
		db.exec('COMMIT');
		return found;
	} catch (error) {
		try {
			if (db.inTransaction) db.exec('ROLLBACK');
		} catch (rollback) {
			log.debug({ error: (rollback as Error).message }, 'a failed transaction had ended already');
		}
		throw error;
	}
}

/** Puts a file that cannot be read aside under another name, with what SQLite keeps beside it; answers that name. */
export function putAside(path: string, now: number): string {
	const stamp = new Date(now).toISOString().replaceAll(/[-:]|\.\d+/g, '');
	const aside = `${path}.broken-${stamp}`;
	for (const end of ['-wal', '-shm', '']) if (existsSync(path + end)) renameSync(path + end, aside + end);
	const folder = dirname(path);
	const earlier = readdirSync(folder)
		.filter((name) => name.startsWith(`${basename(path)}.broken-`) && /Z$/.test(name))
		.sort();
	for (const name of earlier.slice(0, -MOST_ASIDE))
		for (const end of ['-wal', '-shm', '']) rmSync(join(folder, name + end), { force: true });
	return aside;
}
