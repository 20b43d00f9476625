// Interface. May touch: the API's draft.
import type { Finding, MapField, MapRow } from '#lib/domain/tag-map/row.ts';
import { askApi, ApiRefusal } from '../live/call-api.ts';
import type { CheckJson } from '../live/shapes.ts';
import { mergeGone, mergeRemoval, mergeRow, type DraftConflict } from './merge-drafts.ts';

/** A row in the grid: `key` stays while the row is on the page, whatever its id and name become. */
export interface GridRow {
	key: string;
	row: MapRow;
	state: 'published' | 'added' | 'changed' | 'removed';
}
interface Change {
	key: string;
	before: MapRow | null;
	after: MapRow | null;
	index: number;
}
interface DraftAnswer {
	version: number;
	revision: number;
	convert: boolean;
	changes: number;
	rows: (MapRow & { row_version: number; state: GridRow['state'] })[];
}
export interface CellEdit {
	key: string;
	field: MapField;
	value: MapRow[MapField];
}

const SAVE_AFTER_MS = 350;
const MOST_UNDO = 200;

/** The draft on the page: edits at once, saves a moment later, and can take back what was done. */
export class DraftEdits {
	rows = $state.raw<GridRow[]>([]);
	revision = $state(0);
	convert = $state(false);
	check = $state.raw<CheckJson>({ errors: [], warnings: [], version: 0 });
	isLoaded = $state(false);
	saving = $state<'saved' | 'waiting' | 'saving' | 'refused'>('saved');
	problem = $state<string | null>(null);
	undoDepth = $state(0);
	redoDepth = $state(0);
	/** Cells that somebody else changed to another value meanwhile; theirs stand until the person says otherwise. */
	conflicts = $state.raw<DraftConflict[]>([]);

	readonly #site: string;
	readonly #mayEdit: boolean;
	#etag: string | null = null;
	#undo: Change[][] = [];
	#redo: Change[][] = [];
	#dirty = new Set<string>();
	#removed = new Map<string, MapRow>();
	#timer: ReturnType<typeof setTimeout> | null = null;
	#serial = 0;
	#isSending = false;
	/** Rows as the server last gave them, by id: what a merge starts from. */
	#base = new Map<number, MapRow>();

	constructor(site: string, mayEdit: boolean) {
		this.#site = site;
		this.#mayEdit = mayEdit;
	}

	get changes(): number {
		return this.rows.filter((row) => row.state !== 'published').length;
	}

	/** Findings of a row by its tag; the check counts rows from 1, but names are what the eye looks for. */
	findingsOf(tag: string): { errors: Finding[]; warnings: Finding[] } {
		return {
			errors: this.check.errors.filter((finding) => finding.tag === tag),
			warnings: this.check.warnings.filter((finding) => finding.tag === tag),
		};
	}

	async load(): Promise<void> {
		try {
			if (!this.#mayEdit) {
				const { body } = await askApi<{ revision: number; rows: MapRow[] }>(this.#site, '/map');
				this.rows = body.rows.map((row) => ({ key: `id-${row.id}`, row, state: 'published' }));
				this.revision = body.revision;
			} else {
				const { body, etag } = await askApi<DraftAnswer>(this.#site, '/map/draft');
				const keys = new Map(this.rows.map((row) => [row.row.tag, row.key]));
				this.rows = body.rows.map(({ row_version: _version, state, ...row }) => ({
					key: keys.get(row.tag) ?? `id-${row.id}`,
					row,
					state,
				}));
				this.revision = body.revision;
				this.convert = body.convert;
				this.#etag = etag;
				this.#keepBase(body);
				await this.recheck();
			}
			this.isLoaded = true;
			this.problem = null;
		} catch (error) {
			this.problem = error instanceof Error ? error.message : String(error);
		}
	}

	#keepBase(body: DraftAnswer): void {
		this.#base = new Map(
			body.rows.flatMap(({ row_version: _version, state: _state, ...row }) => (row.id == null ? [] : [[row.id, row]])),
		);
	}

	/** Settles a conflict: yours is written over theirs as an edit like any other, or theirs is left. */
	settle(conflict: DraftConflict, take: 'yours' | 'theirs'): void {
		this.conflicts = this.conflicts.filter((one) => one !== conflict);
		if (take === 'theirs') return;
		const found = this.rows.find(({ row }) => row.id === conflict.id);
		if (conflict.field !== null && found)
			this.setCells([{ key: found.key, field: conflict.field, value: conflict.yours as MapRow[MapField] }]);
		else if (conflict.yours === 'removed' && found) this.removeRows([found.key]);
		else if (conflict.yours === 'changed' && !found) this.addRows(this.rows.length - 1, [conflict.row]);
	}

	async recheck(): Promise<void> {
		const { body } = await askApi<CheckJson>(this.#site, '/map/draft/check', { method: 'POST' });
		this.check = body;
	}

	/** Changes cells, as one step to undo. */
	setCells(edits: readonly CellEdit[]): void {
		const after = new Map<string, MapRow>();
		for (const edit of edits) {
			const row = after.get(edit.key) ?? this.rows.find((candidate) => candidate.key === edit.key)?.row;
			if (row) after.set(edit.key, { ...row, [edit.field]: edit.value });
		}
		const changes: Change[] = [];
		this.rows.forEach((row, index) => {
			const next = after.get(row.key);
			if (next && JSON.stringify(next) !== JSON.stringify(row.row))
				changes.push({ key: row.key, before: row.row, after: next, index });
		});
		this.#act(changes);
	}

	/** New rows after the one at `index`; answers their keys. */
	addRows(index: number, rows: readonly MapRow[]): string[] {
		const changes = rows.map((row, place): Change => {
			this.#serial += 1;
			return { key: `new-${this.#serial}`, before: null, after: row, index: index + 1 + place };
		});
		this.#act(changes);
		return changes.map((change) => change.key);
	}

	removeRows(keys: readonly string[]): void {
		const wanted = new Set(keys);
		const changes: Change[] = [];
		this.rows.forEach((row, index) => {
			if (wanted.has(row.key)) changes.push({ key: row.key, before: row.row, after: null, index });
		});
		this.#act(changes);
	}

	undo(): void {
		const step = this.#undo.pop();
		if (!step) return;
		this.#redo.push(step);
		this.#apply(step.map((change) => ({ ...change, before: change.after, after: change.before })).reverse());
	}

	redo(): void {
		const step = this.#redo.pop();
		if (!step) return;
		this.#undo.push(step);
		this.#apply(step);
	}

	#act(changes: Change[]): void {
		if (changes.length === 0 || !this.#mayEdit) return;
		this.#undo.push(changes);
		if (this.#undo.length > MOST_UNDO) this.#undo.shift();
		this.#redo = [];
		this.#apply(changes);
	}

	#apply(changes: readonly Change[]): void {
		const rows = [...this.rows];
		for (const change of changes) {
			const index = rows.findIndex((row) => row.key === change.key);
			if (change.after === null) {
				if (index >= 0) {
					const gone = rows[index]!;
					rows.splice(index, 1);
					if (gone.row.id != null) this.#removed.set(change.key, gone.row);
					this.#dirty.delete(change.key);
				}
			} else if (index >= 0) {
				const old = rows[index]!;
				rows[index] = { ...old, row: change.after, state: old.state === 'published' ? 'changed' : old.state };
				this.#dirty.add(change.key);
			} else {
				rows.splice(Math.min(change.index, rows.length), 0, { key: change.key, row: change.after, state: 'added' });
				this.#removed.delete(change.key);
				this.#dirty.add(change.key);
			}
		}
		this.rows = rows;
		this.undoDepth = this.#undo.length;
		this.redoDepth = this.#redo.length;
		this.#saveSoon();
	}

	#saveSoon(): void {
		this.saving = 'waiting';
		if (this.#timer) clearTimeout(this.#timer);
		this.#timer = setTimeout(() => void this.save(), SAVE_AFTER_MS);
	}

	/** Sends what changed since the last save. What was typed stays on the page whatever the answer is. */
	async save(): Promise<void> {
		// One at a time: a second one under the same ETag would conflict with ourselves.
		if (this.#isSending) {
			this.#saveSoon();
			return;
		}
		const keys = [...this.#dirty];
		const sent = this.rows.filter((row) => keys.includes(row.key) && row.row.tag.trim() !== '');
		const removed = [...this.#removed.entries()];
		if (sent.length === 0 && removed.length === 0) {
			this.saving = 'saved';
			return;
		}
		this.saving = 'saving';
		this.#isSending = true;
		let isStale = false;
		try {
			const rows = [...sent.map(({ row }) => row), ...removed.map(([, row]) => ({ id: row.id, tag: row.tag, delete: true }))];
			const headers = this.#etag ? { 'if-match': this.#etag } : undefined;
			const { body, etag } = await askApi<CheckJson>(this.#site, '/map/draft', { method: 'PATCH', json: { rows }, headers });
			this.#etag = etag;
			this.check = body;
			for (const { key, row } of sent)
				if (this.rows.find((candidate) => candidate.key === key)?.row === row) this.#dirty.delete(key);
			for (const [key] of removed) this.#removed.delete(key);
			this.problem = null;
			this.saving = this.#dirty.size > 0 ? 'waiting' : 'saved';
			// Ids for life come from the server, and so does whether a row went back to what is published.
			if (this.#dirty.size === 0) await this.#refresh();
		} catch (error) {
			this.saving = 'refused';
			this.problem = error instanceof Error ? error.message : String(error);
			isStale = error instanceof ApiRefusal && error.status === 412;
		} finally {
			this.#isSending = false;
		}
		if (isStale) await this.#takeOver();
	}

	/** Somebody else changed the draft: what only one of us changed is kept, cell by cell; what both changed is asked about. */
	async #takeOver(): Promise<void> {
		try {
			const { body, etag } = await askApi<DraftAnswer>(this.#site, '/map/draft');
			const theirs = new Map(body.rows.filter((row) => row.state !== 'removed').map((row) => [row.id, row]));
			const conflicts: DraftConflict[] = [];
			const keys = new Map(this.rows.flatMap(({ key, row }) => (row.id == null ? [] : [[row.id, key]])));
			const mine = new Map(this.rows.filter(({ key }) => this.#dirty.has(key)).map((one) => [one.row.id, one]));
			const away = new Map([...this.#removed.values()].map((row) => [row.id, row]));
			const rows: GridRow[] = [];
			for (const { row_version: _version, state, ...row } of theirs.values()) {
				const key = keys.get(row.id ?? 0) ?? `id-${row.id}`;
				const base = this.#base.get(row.id ?? 0);
				const removed = away.get(row.id);
				if (removed && base) {
					const conflict = mergeRemoval(base, row);
					if (!conflict) continue;
					conflicts.push(conflict);
					for (const [gone, one] of this.#removed) if (one.id === row.id) this.#removed.delete(gone);
				}
				const own = mine.get(row.id);
				if (!own || !base) {
					rows.push({ key, row, state });
					continue;
				}
				const merged = mergeRow(base, own.row, row);
				conflicts.push(...merged.conflicts);
				rows.push({ key, row: merged.row, state: state === 'published' ? 'changed' : state });
			}
			for (const own of mine.values()) {
				if (own.row.id == null) rows.push(own);
				else if (!theirs.has(own.row.id)) {
					conflicts.push(mergeGone(this.#base.get(own.row.id) ?? own.row, own.row));
					this.#dirty.delete(own.key);
				}
			}
			rows.push(...this.rows.filter(({ key, row }) => row.id == null && !this.#dirty.has(key)));
			this.#etag = etag;
			this.#keepBase(body);
			this.rows = rows;
			this.conflicts = [...this.conflicts, ...conflicts];
			// Steps before this would bring back rows as they were before the other's changes.
			this.#undo = [];
			this.#redo = [];
			this.undoDepth = 0;
			this.redoDepth = 0;
			this.problem = null;
			this.#saveSoon();
		} catch (error) {
			this.problem = error instanceof Error ? error.message : String(error);
		}
	}

	async #refresh(): Promise<void> {
		const { body, etag } = await askApi<DraftAnswer>(this.#site, '/map/draft');
		if (this.#dirty.size > 0 || this.#removed.size > 0) return;
		this.#etag = etag;
		this.#keepBase(body);
		const byTag = new Map(this.rows.map((row) => [row.row.tag.toLowerCase(), row.key]));
		const byId = new Map(this.rows.filter((row) => row.row.id != null).map((row) => [row.row.id, row.key]));
		const order = new Map(this.rows.map((row, index) => [row.key, index]));
		const unsent = this.rows.filter((row) => row.row.tag.trim() === '');
		this.rows = [
			...body.rows
				.filter((row) => row.state !== 'removed')
				.map(({ row_version: _version, state, ...row }) => ({
					key: byId.get(row.id) ?? byTag.get(row.tag.toLowerCase()) ?? `id-${row.id}`,
					row,
					state,
				})),
			...unsent,
		].sort((a, b) => (order.get(a.key) ?? 1e9) - (order.get(b.key) ?? 1e9));
		this.removedRows = body.rows.filter((row) => row.state === 'removed').length;
	}
	/** Published rows that the draft takes away. */
	removedRows = $state(0);
}
