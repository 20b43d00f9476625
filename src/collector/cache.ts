// Edge: collector. What a start without the database goes on from: held sources with their plans and settings, tags' memory, test values. May touch: its file in the data folder.
import { deserialize, serialize } from 'node:v8';
import { deflateSync, inflateSync } from 'node:zlib';
import type { JudgingState } from '#lib/pipeline/evaluate/judging-state.ts';
import {
	atOnce,
	closeLocalFile,
	isBroken,
	LocalFileBusy,
	openLocalFile,
	putAside,
	type LocalDatabase,
} from '#lib/pipeline/store/local-file.ts';
import type { LatestUpdate } from '#lib/pipeline/store/write-batch.ts';
import type { TagMemory, TagRuntime } from '#lib/pipeline/tag-runtime.ts';
import { log } from '#lib/server/log.ts';
import type { SourcePlan } from './load-plans.ts';
import type { StandingTest } from './test-values.ts';

/** Goes up when plans, memories or tests change their form: those of another version are not read. */
const VERSION = 1;
const SCHEMA = `
CREATE TABLE parts (name TEXT PRIMARY KEY, packed BLOB NOT NULL) STRICT;
CREATE TABLE memories (tag_id INTEGER PRIMARY KEY, judging TEXT, latest TEXT) STRICT`;

interface Parts {
	/** Published rows, compiled, and settings with their secrets, of the sources whose leases are held. */
	plans: SourcePlan[];
	installation: string;
	tests: StandingTest[];
}

/** A file that fails is said once and never stops the collector: it costs only a start without the database. */
export class CollectorCache {
	/** Why nothing can be read; null when all is well. */
	problem: string | null = null;
	readonly #path: string;
	#db: LocalDatabase | null = null;
	#isFailing = false;

	/** Opens or makes the file. Throws: LocalFileBusy. */
	constructor(path: string, now: number) {
		this.#path = path;
		try {
			this.#db = openLocalFile(path, VERSION, SCHEMA);
			const [check] = this.#db.pragma('quick_check(1)') as { quick_check?: string }[];
			if (check?.quick_check !== 'ok')
				throw Object.assign(new Error(check?.quick_check ?? 'not sound'), { code: 'SQLITE_CORRUPT' });
		} catch (error) {
			if (error instanceof LocalFileBusy) throw error;
			this.problem = (error as Error).message;
			if (this.#db) closeLocalFile(this.#db);
			this.#db = null;
			if (!isBroken(error)) {
				this.#failed(error);
				return;
			}
			const file = putAside(path, now);
			log.error({ error: this.problem, file }, 'the cache could not be read and was put aside');
			this.#db = openLocalFile(path, VERSION, SCHEMA);
		}
	}

	/** What was saved under a name; null when nothing was, or when it cannot be read, and then `problem` says so. */
	read<K extends keyof Parts>(name: K): Parts[K] | null {
		try {
			const row = this.#db?.prepare('SELECT packed FROM parts WHERE name = ?').get(name) as { packed: Buffer } | undefined;
			return row ? (deserialize(inflateSync(row.packed)) as Parts[K]) : null;
		} catch (error) {
			this.problem = (error as Error).message;
			log.error({ error: this.problem, part: name }, 'a part of the cache cannot be read');
			return null;
		}
	}

	save<K extends keyof Parts>(name: K, part: Parts[K]): void {
		this.#write((db) => {
			db.prepare('INSERT INTO parts (name, packed) VALUES (?, ?) ON CONFLICT (name) DO UPDATE SET packed = excluded.packed').run(
				name,
				deflateSync(serialize(part), { level: 1 }),
			);
			if (name !== 'plans') return;
			const tags = (part as SourcePlan[]).flatMap((plan) => plan.plans.map((tag) => tag.tagId));
			db.prepare('DELETE FROM memories WHERE tag_id NOT IN (SELECT value FROM json_each(?))').run(JSON.stringify(tags));
		});
	}

	/** Keeps what tags remember. */
	remember(tags: Iterable<Pick<TagRuntime, 'plan' | 'judging' | 'latest'>>): void {
		this.#write((db) => {
			const keep = db.prepare(
				'INSERT INTO memories (tag_id, judging, latest) VALUES (?, ?, ?) ON CONFLICT (tag_id) DO UPDATE SET judging = excluded.judging, latest = excluded.latest',
			);
			for (const { plan, judging, latest } of tags)
				keep.run(plan.tagId, judging && JSON.stringify(judging), latest && JSON.stringify(latest));
		});
	}

	memories(): Map<number, TagMemory> {
		const found = new Map<number, TagMemory>();
		try {
			const rows = this.#db?.prepare('SELECT tag_id, judging, latest FROM memories').all() ?? [];
			for (const row of rows as { tag_id: number; judging: string | null; latest: string | null }[])
				found.set(row.tag_id, {
					judging: row.judging === null ? null : (JSON.parse(row.judging) as JudgingState),
					latest: row.latest === null ? null : (JSON.parse(row.latest) as LatestUpdate),
				});
		} catch (error) {
			this.#failed(error);
		}
		return found;
	}

	close(): void {
		if (this.#db) closeLocalFile(this.#db);
		this.#db = null;
	}

	#write(work: (db: LocalDatabase) => void): void {
		const db = this.#db;
		if (!db) return;
		try {
			atOnce(db, () => work(db));
			this.#isFailing = false;
		} catch (error) {
			this.#failed(error);
		}
	}

	#failed(error: unknown): void {
		if (!this.#isFailing)
			log.error(
				{ error: (error as Error).message, file: this.#path },
				'the cache cannot be used: a start without the database would sample nothing',
			);
		this.#isFailing = true;
	}
}
