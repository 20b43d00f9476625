// Edge: store. May touch: the spool file, the note beside it, free space. A file that fails never ends the process.
import { existsSync, readFileSync, statfsSync, statSync, writeFileSync } from 'node:fs';
import { dirname } from 'node:path';
import { log } from '#lib/server/log.ts';
import {
	atOnce,
	closeLocalFile,
	isBroken,
	LocalFileBusy,
	numberOf,
	openLocalFile,
	putAside,
	type LocalDatabase,
} from './local-file.ts';
import { SPOOL_SCHEMA, SPOOL_VERSION } from './spool-rows.ts';

const REOPEN_MS = 10_000;
const FREE_LOOK_MS = 5_000;
/** An empty file larger than this gives its space back. */
const SHRINK_BYTES = 16 * 1024 * 1024;

/** What the file holds, noted beside it, so that it can be counted when the file cannot be read. */
export interface SpoolNote {
	from: number | null;
	bySource: [sourceId: string, readings: number][];
}

export interface SpoolFileOptions {
	path: string;
	/** Space that stays free on the disk, so that PostgreSQL can start again on it. */
	minFreeBytes: number;
	now(): number;
	/** The file was put aside; what it held is lost. */
	onLost(note: SpoolNote): void;
	/** A file is in use: what it holds is to be counted. */
	onOpen(): void;
}

export class SpoolFile {
	/** Bytes in use within the file. */
	bytes = 0;
	readonly #options: SpoolFileOptions;
	#db: LocalDatabase | null = null;
	#triedAt = -Infinity;
	#isFailing = false;
	#isClosed = false;
	#freeAt = -Infinity;
	#isShort = false;

	constructor(options: SpoolFileOptions) {
		this.#options = options;
	}

	/** Opens what is there; a file that cannot be read is put aside and a new one made. Throws: LocalFileBusy. */
	open(): void {
		const { path, onOpen } = this.#options;
		this.#triedAt = performance.now();
		try {
			this.#db = openLocalFile(path, SPOOL_VERSION, SPOOL_SCHEMA);
			this.#measure(this.#db);
			onOpen();
		} catch (error) {
			if (error instanceof LocalFileBusy) throw error;
			if (!isBroken(error)) {
				this.#shut();
				this.#failed(error);
				return;
			}
			this.#setAside(error);
		}
	}

	/** Runs `work` as one commit; false when it could not be kept, which is said once. A file found broken is replaced and `work` done on the new one. */
	write(work: (db: LocalDatabase) => void): boolean {
		for (let tries = 0; tries < 2; tries += 1) {
			const db = this.#usable();
			if (!db) return false;
			try {
				atOnce(db, () => work(db));
				this.#measure(db);
				if (this.#isFailing) log.info('the spool can be written again');
				this.#isFailing = false;
				return true;
			} catch (error) {
				if (!isBroken(error)) {
					this.#failed(error);
					return false;
				}
				this.#setAside(error);
			}
		}
		return false;
	}

	/** What `look` finds; `otherwise` when the file cannot be read, which replaces it. */
	read<T>(look: (db: LocalDatabase) => T, otherwise: T): T {
		const db = this.#usable();
		if (!db) return otherwise;
		try {
			return look(db);
		} catch (error) {
			if (isBroken(error)) this.#setAside(error);
			else this.#failed(error);
			return otherwise;
		}
	}

	/** True while less than the space that must stay free is left on the disk. */
	get isDiskShort(): boolean {
		if (performance.now() - this.#freeAt > FREE_LOOK_MS) {
			this.#freeAt = performance.now();
			const { bavail, bsize } = statfsSync(dirname(this.#options.path));
			this.#isShort = bavail * bsize < this.#options.minFreeBytes;
		}
		return this.#isShort;
	}

	note(note: SpoolNote): void {
		try {
			writeFileSync(this.#notePath, JSON.stringify(note), { mode: 0o600 });
		} catch (error) {
			this.#failed(error);
		}
	}

	/** Gives the disk back what a file that is empty now had grown to. */
	shrink(): void {
		const db = this.#usable();
		try {
			if (!db || statSync(this.#options.path).size < SHRINK_BYTES) return;
			db.exec('VACUUM');
			db.pragma('wal_checkpoint(TRUNCATE)');
			this.#measure(db);
		} catch (error) {
			this.#failed(error);
		}
	}

	close(): void {
		this.#isClosed = true;
		this.#shut();
	}

	#shut(): void {
		if (this.#db) closeLocalFile(this.#db);
		this.#db = null;
	}

	#usable(): LocalDatabase | null {
		if (!this.#db && !this.#isClosed && performance.now() - this.#triedAt > REOPEN_MS) {
			try {
				this.open();
			} catch (error) {
				this.#failed(error);
			}
		}
		return this.#db;
	}

	get #notePath(): string {
		return `${this.#options.path}.note.json`;
	}

	#measure(db: LocalDatabase): void {
		this.bytes = (numberOf(db, 'page_count') - numberOf(db, 'freelist_count')) * numberOf(db, 'page_size');
	}

	#failed(error: unknown): void {
		if (!this.#isFailing)
			log.error(
				{ error: (error as Error).message, file: this.#options.path },
				'the spool cannot be written: readings wait in memory, and are lost when that is full',
			);
		this.#isFailing = true;
	}

	#setAside(error: unknown): void {
		const { path, now, onLost, onOpen } = this.#options;
		const note = this.#noted();
		const readings = note.bySource.reduce((sum, [, count]) => sum + count, 0);
		this.#shut();
		try {
			const bytes = existsSync(path) ? statSync(path).size : 0;
			const file = putAside(path, now());
			log.error(
				{ error: (error as Error).message, file, bytes, readings },
				'the spool could not be read: it was put aside, and what it held is counted as lost',
			);
			onLost(note);
			this.#db = openLocalFile(path, SPOOL_VERSION, SPOOL_SCHEMA);
			this.#measure(this.#db);
			onOpen();
			this.note({ from: null, bySource: [] });
		} catch (problem) {
			this.#shut();
			this.#failed(problem);
		}
	}

	#noted(): SpoolNote {
		try {
			return JSON.parse(readFileSync(this.#notePath, 'utf8')) as SpoolNote;
		} catch {
			return { from: null, bySource: [] };
		}
	}
}
