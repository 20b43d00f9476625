// Pure.

/** One glyph a meaning, drawn once in `StateGlyph.svelte`, the same in lists, pictures, grid and pulse line. */
export type GlyphState =
	| 'alert'
	| 'danger'
	| 'stale'
	| 'bad'
	| 'test'
	| 'failure'
	| 'check'
	| 'out-of-spec'
	| 'maintenance'
	| 'edit'
	| 'done'
	| 'error'
	| 'normal';
