// Edge: store. May touch: the spool file. Keeps what was judged while PostgreSQL is away, until it is delivered.
import { log } from '#lib/server/log.ts';
import { type Loss, type LossLedger } from '#lib/pipeline/loss-ledger.ts';
import type { LocalDatabase } from './local-file.ts';
import { packForSpool, unpackFromSpool, type PackedReadings } from './spool-codec.ts';
import { SpoolFile, type SpoolNote } from './spool-file.ts';
import { asFoundAfterwards, type BatchRow, type SpooledChange, type SpooledTag } from './spool-rows.ts';
import type { TagAlarmChange, WriteBatch } from './write-batch.ts';

export interface SpoolOptions {
	path: string;
	/** Bytes in use at which new samples are refused. */
	maxBytes: number;
	/** What waited longer is let go, oldest first. */
	maxAgeMs: number;
	/** Space that stays free on the disk, so that PostgreSQL can start again on it. */
	minFreeBytes: number;
	now(): number;
}

/** Figures for the log, the metrics and the pages. */
export interface SpoolState {
	readings: number;
	/** Changes of alarms and connections that wait. */
	changes: number;
	/** In use within the file; 0 when it is empty. */
	bytes: number;
	maxBytes: number;
	maxAgeMs: number;
	/** When the oldest readings were taken; null while there are none. */
	oldestAt: number | null;
	isFull: boolean;
}

/** Changes of alarms may go this far beyond the limit for readings: they are small, and an alarm is worth more than a reading. */
const CHANGES_BEYOND = 1.25;

interface StoredBatch {
	seq: number;
	taken_at: number;
	readings: number;
	by_source: string;
}

const rowOf = (row: StoredBatch): BatchRow => ({
	seq: row.seq,
	takenAt: row.taken_at,
	readings: row.readings,
	bySource: JSON.parse(row.by_source) as [string, number][],
});

export class Spool {
	readonly losses: LossLedger;
	readonly #options: SpoolOptions;
	readonly #file: SpoolFile;
	#savedLosses = -1;
	#readings = 0;
	#changes = 0;
	#tagRows = 0;
	#oldestAt: number | null = null;
	#bySource = new Map<string, number>();
	#stamp = 0;
	/** Rows that could not be unpacked and are counted as lost. */
	#spoiled = new Set<number>();

	/** Opens what an earlier run left, or a new file; one that cannot be read is put aside and what it held is counted as lost. Throws: LocalFileBusy. */
	constructor(options: SpoolOptions, losses: LossLedger) {
		this.#options = options;
		this.losses = losses;
		this.#file = new SpoolFile({
			...options,
			onLost: (note) => this.#lost(note),
			onOpen: () => this.#load(),
		});
		this.#file.open();
	}

	get state(): SpoolState {
		const { maxBytes, maxAgeMs } = this.#options;
		const isEmpty = this.#oldestAt === null && this.#changes + this.#tagRows === 0;
		return {
			readings: this.#readings,
			changes: this.#changes,
			bytes: isEmpty ? 0 : this.#file.bytes,
			maxBytes,
			maxAgeMs,
			oldestAt: this.#oldestAt,
			isFull: this.isFull,
		};
	}

	/** No room for further readings: the limit is reached, or the disk is about to be full. */
	get isFull(): boolean {
		return this.#file.bytes >= this.#options.maxBytes || this.#file.isDiskShort;
	}

	get hasReadings(): boolean {
		return this.#oldestAt !== null;
	}

	/** Changes wait: later ones must queue behind them. */
	get hasChanges(): boolean {
		return this.#changes > 0;
	}

	/** Newest states of tags wait. */
	get hasTags(): boolean {
		return this.#tagRows > 0;
	}

	/** Keeps a batch in one commit; false when it could not be kept, and then nothing of it is. */
	append(batch: WriteBatch, sourceOf: (tagId: number) => string): boolean {
		const now = this.#options.now();
		const bySource = new Map<string, number>();
		for (const { tagId } of batch.readings) {
			const source = sourceOf(tagId);
			bySource.set(source, (bySource.get(source) ?? 0) + 1);
		}
		const packed = batch.readings.length + batch.testReadings.length > 0 ? packForSpool(batch) : null;
		const fits = this.#file.bytes < this.#options.maxBytes * CHANGES_BEYOND;
		const changes = fits ? batch.alarmChanges.length + batch.connections.length : 0;
		if (!fits) for (const { tagId } of batch.alarmChanges) this.losses.add(sourceOf(tagId), 'alarm-changes', 1, now);
		const isKept = this.#file.write((db) => {
			if (packed) {
				const made = db
					.prepare('INSERT INTO batches (taken_at, readings, by_source) VALUES (?, ?, ?)')
					.run(now, batch.readings.length, JSON.stringify([...bySource]));
				db.prepare('INSERT INTO packs (seq, packed) VALUES (?, ?)').run(made.lastInsertRowid, packed);
			}
			if (changes > 0) {
				const keep = db.prepare('INSERT INTO changes (source_id, kind, change) VALUES (?, ?, ?)');
				for (const change of batch.alarmChanges) keep.run(sourceOf(change.tagId), 'alarm', JSON.stringify(change));
				for (const change of batch.connections) keep.run(change.sourceId, 'connection', JSON.stringify(change));
			}
			this.#keepTags(db, batch, sourceOf);
			this.#keepLosses(db);
		});
		if (!isKept) return false;
		this.#changes += changes;
		this.#tagRows += batch.latest.length + batch.judgingStates.length;
		if (packed) {
			this.#readings += batch.readings.length;
			this.#oldestAt ??= now;
			for (const [source, count] of bySource) this.#bySource.set(source, (this.#bySource.get(source) ?? 0) + count);
			this.#note();
		}
		return true;
	}

	/** The newest state of each tag: a row a tag, whatever the number of batches. */
	#keepTags(db: LocalDatabase, batch: WriteBatch, sourceOf: (tagId: number) => string): void {
		this.#stamp += 1;
		if (batch.judgingStates.length > 0) {
			const keep = db.prepare(
				'INSERT INTO tags (tag_id, source_id, stamp, judging) VALUES (?, ?, ?, ?) ON CONFLICT (tag_id) DO UPDATE SET stamp = excluded.stamp, judging = excluded.judging',
			);
			for (const { tagId, state } of batch.judgingStates) keep.run(tagId, sourceOf(tagId), this.#stamp, JSON.stringify(state));
		}
		if (batch.latest.length > 0) {
			// Once a tag's time was allowed to move back, that holds until it is delivered.
			const keep = db.prepare(
				'INSERT INTO tags (tag_id, source_id, stamp, latest, resets) VALUES (?, ?, ?, ?, ?) ON CONFLICT (tag_id) DO UPDATE SET stamp = excluded.stamp, latest = excluded.latest, resets = max(resets, excluded.resets)',
			);
			for (const one of batch.latest)
				keep.run(one.tagId, sourceOf(one.tagId), this.#stamp, JSON.stringify(one), one.resets ? 1 : 0);
		}
	}

	#keepLosses(db: LocalDatabase): void {
		if (this.#savedLosses === this.losses.version) return;
		db.exec('DELETE FROM losses');
		const keep = db.prepare('INSERT INTO losses (source_id, reason, from_at, to_at, count) VALUES (?, ?, ?, ?, ?)');
		for (const loss of this.losses.entries()) keep.run(loss.sourceId, loss.reason, loss.from, loss.to, loss.count);
		this.#savedLosses = this.losses.version;
	}

	/** The oldest batches, together some `most` readings. A row that is spoiled is counted as lost. */
	oldest(most: number): PackedReadings & { rows: BatchRow[] } {
		const rows: BatchRow[] = [];
		const readings: PackedReadings['readings'][number][] = [];
		const testReadings: PackedReadings['testReadings'][number][] = [];
		this.#file.read((db) => {
			const next = db.prepare(
				'SELECT b.seq, b.taken_at, b.readings, b.by_source, p.packed FROM batches b JOIN packs p ON p.seq = b.seq WHERE b.seq > ? ORDER BY b.seq LIMIT 1',
			);
			for (let after = 0; readings.length < most && rows.length < most;) {
				const found = next.get(after) as (StoredBatch & { packed: Buffer }) | undefined;
				if (!found) break;
				const row = rowOf(found);
				after = row.seq;
				rows.push(row);
				try {
					const unpacked = unpackFromSpool(found.packed);
					for (const reading of unpacked.readings) readings.push(reading);
					testReadings.push(...unpacked.testReadings);
				} catch (error) {
					if (this.#spoiled.has(row.seq)) continue;
					this.#spoiled.add(row.seq);
					log.error(
						{ error: (error as Error).message, readings: row.readings },
						'a row of the spool is spoiled and counted as lost',
					);
					this.#lose([row], 'spool-broken');
				}
			}
		}, undefined);
		return { rows, readings, testReadings };
	}

	/** Strikes out batches that are delivered or let go; false when the file could not be written. */
	strike(rows: readonly BatchRow[]): boolean {
		const isDone = this.#file.write((db) => {
			const batch = db.prepare('DELETE FROM batches WHERE seq = ?');
			const pack = db.prepare('DELETE FROM packs WHERE seq = ?');
			for (const { seq } of rows) {
				batch.run(seq);
				pack.run(seq);
			}
			this.#keepLosses(db);
		});
		if (!isDone) return false;
		for (const row of rows) {
			this.#readings -= row.readings;
			for (const [source, count] of row.bySource) {
				const left = (this.#bySource.get(source) ?? 0) - count;
				if (left > 0) this.#bySource.set(source, left);
				else this.#bySource.delete(source);
			}
		}
		this.#oldestAt = this.#file.read(
			(db) =>
				(db.prepare('SELECT taken_at FROM batches ORDER BY seq LIMIT 1').get() as StoredBatch | undefined)?.taken_at ?? null,
			null,
		);
		this.#note();
		if (this.#oldestAt === null) {
			this.#spoiled.clear();
			this.#file.shrink();
		}
		return true;
	}

	/** The first changes in their order. */
	firstChanges(most: number): { seq: number; change: SpooledChange }[] {
		return this.#file.read((db) => {
			const rows = db.prepare('SELECT seq, kind, change FROM changes ORDER BY seq LIMIT ?').all(most) as {
				seq: number;
				kind: SpooledChange['kind'];
				change: string;
			}[];
			return rows.map((row) => ({
				seq: row.seq,
				change: { kind: row.kind, change: JSON.parse(row.change) as never } as SpooledChange,
			}));
		}, []);
	}

	/** Strikes out changes up to and with `seq`. */
	changesDelivered(seq: number): boolean {
		const isDone = this.#file.write((db) => void db.prepare('DELETE FROM changes WHERE seq <= ?').run(seq));
		this.#recount();
		return isDone;
	}

	/** Tags whose newest state waits, and the mark that `tagsDelivered` wants. */
	tags(): { stamp: number; tags: SpooledTag[] } {
		const tags = this.#file.read((db) => {
			const rows = db.prepare('SELECT tag_id, judging, latest, resets FROM tags ORDER BY tag_id').all() as {
				tag_id: number;
				judging: string | null;
				latest: string | null;
				resets: number;
			}[];
			return rows.map((row): SpooledTag => {
				const latest = row.latest === null ? null : (JSON.parse(row.latest) as NonNullable<SpooledTag['latest']>);
				return {
					tagId: row.tag_id,
					judging: row.judging === null ? null : (JSON.parse(row.judging) as SpooledTag['judging']),
					latest: latest && { ...latest, resets: row.resets === 1 },
				};
			});
		}, []);
		return { stamp: this.#stamp, tags };
	}

	tagsDelivered(stamp: number): boolean {
		const isDone = this.#file.write((db) => void db.prepare('DELETE FROM tags WHERE stamp <= ?').run(stamp));
		this.#recount();
		return isDone;
	}

	/** Sources whose judging waits here. */
	judgedSources(): string[] {
		return this.#file.read((db) => {
			const rows = db.prepare('SELECT source_id FROM changes WHERE is_foreign = 0 UNION SELECT source_id FROM tags').all();
			return (rows as { source_id: string }[]).map((row) => row.source_id);
		}, []);
	}

	/** Another collector has run these sources meanwhile: its judging stands, and alarms found here are recorded as found afterwards. */
	disown(sourceIds: readonly string[]): void {
		this.#file.write((db) => {
			for (const id of sourceIds) {
				const rows = db
					.prepare("SELECT change FROM changes WHERE source_id = ? AND is_foreign = 0 AND kind = 'alarm' ORDER BY seq")
					.all(id) as { change: string }[];
				db.prepare('DELETE FROM changes WHERE source_id = ? AND is_foreign = 0').run(id);
				const keep = db.prepare("INSERT INTO changes (source_id, is_foreign, kind, change) VALUES (?, 1, 'alarm', ?)");
				for (const found of asFoundAfterwards(rows.map((row) => JSON.parse(row.change) as TagAlarmChange)))
					keep.run(id, JSON.stringify(found));
				db.prepare('DELETE FROM tags WHERE source_id = ?').run(id);
			}
		});
		this.#recount();
	}

	/** Lets go what has waited longer than the limit of age, and writes down what was lost since. */
	keepWithin(): void {
		const edge = this.#options.now() - this.#options.maxAgeMs;
		if (this.#oldestAt !== null && this.#oldestAt < edge) {
			const rows = this.#file.read((db) => {
				const found = db
					.prepare('SELECT seq, taken_at, readings, by_source FROM batches WHERE taken_at < ? ORDER BY seq')
					.all(edge);
				return (found as StoredBatch[]).map(rowOf);
			}, []);
			this.#lose(rows, 'spool-age');
			this.strike(rows);
		}
		if (this.#savedLosses !== this.losses.version) this.#file.write((db) => this.#keepLosses(db));
	}

	/** Ends the use of the file. */
	close(): void {
		this.keepWithin();
		this.#file.close();
	}

	#lose(rows: readonly BatchRow[], reason: 'spool-age' | 'spool-broken'): void {
		for (const row of rows) for (const [source, count] of row.bySource) this.losses.add(source, reason, count, row.takenAt);
	}

	#lost(note: SpoolNote): void {
		const now = this.#options.now();
		for (const [source, count] of note.bySource) this.losses.add(source, 'spool-broken', count, note.from ?? now, now);
		this.#savedLosses = -1;
	}

	#note(): void {
		this.#file.note({ from: this.#oldestAt, bySource: [...this.#bySource] });
	}

	#load(): void {
		this.#file.read((db) => {
			const losses = db.prepare('SELECT source_id, reason, from_at, to_at, count FROM losses').all() as {
				source_id: string;
				reason: Loss['reason'];
				from_at: number;
				to_at: number;
				count: number;
			}[];
			// A file opened again in the same run holds what the ledger knows already.
			if (this.#savedLosses === -1)
				for (const row of losses) this.losses.add(row.source_id, row.reason, row.count, row.from_at, row.to_at);
			this.#savedLosses = losses.length > 0 ? this.losses.version : -1;
			this.#bySource = new Map();
			this.#readings = 0;
			this.#oldestAt = null;
			for (const one of db.prepare('SELECT seq, taken_at, readings, by_source FROM batches ORDER BY seq').iterate()) {
				const row = rowOf(one as StoredBatch);
				this.#readings += row.readings;
				this.#oldestAt ??= row.takenAt;
				for (const [source, count] of row.bySource) this.#bySource.set(source, (this.#bySource.get(source) ?? 0) + count);
			}
			this.#stamp = (db.prepare('SELECT coalesce(max(stamp), 0) AS n FROM tags').get() as { n: number }).n;
		}, undefined);
		this.#recount();
	}

	#recount(): void {
		this.#file.read((db) => {
			this.#changes = (db.prepare('SELECT count(*) AS n FROM changes').get() as { n: number }).n;
			this.#tagRows = (db.prepare('SELECT count(*) AS n FROM tags').get() as { n: number }).n;
		}, undefined);
	}
}
