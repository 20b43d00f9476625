// Pure.
/** Stations of a value's way, in order: from the bytes on the wire to what each feed delivered. */
export const TRACE_HOPS = ['wire', 'decode', 'scale', 'convert', 'quality', 'verdict', 'stored', 'feed'] as const;
export type TraceHopName = (typeof TRACE_HOPS)[number];

/** One station, as the API answers it and the page draws it. */
export interface TraceHop {
	hop: TraceHopName;
	/** Short line above the station: `registers 100–101`, `float32`, `× 0.01 + 0`, `Good`, or a feed's name. */
	label: string;
	/** What came in and what went out: a number, or text such as bytes, a quality's name or a verdict. */
	before: number | string | null;
	after: number | string | null;
	/** Unit with detector in words, of `after`, where it is a number. */
	unit: string | null;
	/** Short line under the station: `unit 4, in 11 ms`, `high word first`, `in range 0–50`. */
	detail: string;
	/** The sum in full, for the opened station: `0.25125 × 25.4 ÷ √2`. */
	formula: string | null;
	/** RFC 3339 time at which it happened, where that is known. */
	at: string | null;
	/** True as captured; false where it was rebuilt from what is stored and the revision in force then. */
	captured: boolean;
	/** The hop changed the number, or spoiled it: quality turned bad or uncertain, or a limit was crossed. */
	mark: 'changed' | 'spoiled' | 'alert' | 'danger' | null;
}

/** Another way to read the same bytes, carried on by the tag's own scale and conversion. */
export interface OtherDecoding {
	/** What differs from the tag's own way: `low word first`, `uint16, bytes swapped`. */
	words: string;
	raw: number;
	/** In the raw unit. */
	scaled: number;
	/** In the tag's unit. */
	value: number;
}

/** A value's way. */
export interface Trace {
	tag: string;
	at: string;
	/** `source`: measured then; `hub`: read then, the true age unknown. */
	time_from: 'source' | 'hub';
	revision: number;
	value: number | null;
	unit: string;
	hops: TraceHop[];
	/** Empty where the source gives no bytes. */
	decodings: OtherDecoding[];
}
