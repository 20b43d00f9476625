// Pure.
import type { Reason } from './reason.ts';

/** Verdict of a value against its tag's limits. Without limits it is `normal`; without a usable value `unknown`. */
export type Verdict = 'normal' | 'alert' | 'danger' | 'unknown';

/** Whose clock `at` came from: the device's (`source`) or ours (`hub`). */
export type TimeFrom = 'source' | 'hub';

/** Raw scalar as decoded from the wire, before scale and unit. A 64-bit integer beyond 2^53 stays a bigint here. */
export type RawScalar = number | bigint | boolean | string | null;

/**
 * One reading: a value in its tag's unit, with quality and one trusted time.
 * Identity is (tagId, at, value, quality); all times are milliseconds since the epoch, UTC.
 */
export interface Reading {
	tagId: number;
	/** The trusted time, in whole milliseconds. */
	at: number;
	/** In the tag's unit; null exactly when the quality is bad. Never NaN, never infinite, never -0. */
	value: number | null;
	/** OPC UA StatusCode, unsigned. */
	quality: number;
	timeFrom: TimeFrom;
	/** When the hub received it. */
	receivedAt: number;
	/** The source's own time where it was not trusted, kept beside `at`. */
	sourceAt: number | null;
	reason: Reason | null;
	/** Decoded raw scalar. */
	raw: RawScalar;
	/** Bytes or payload as captured, for the trace: hex for bytes, text otherwise. Null where the protocol gives none. */
	wire: string | null;
	/** Published map revision that normalized it. */
	revision: number;
}

/** A reading that a test value put in a tag's place; kept apart from history. */
export interface TestReading {
	tagId: number;
	at: number;
	value: number;
	quality: number;
}
