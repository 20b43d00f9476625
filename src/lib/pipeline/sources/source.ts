// Edge: sources. May touch: protocol clients, sockets. Not: database, tag map, scaling.
import type { Address, WantedAddress } from '#lib/domain/tag-map/address.ts';

export type { Address, WantedAddress };

/** What a source took from the wire, not yet decoded; `key` is the tag id it was asked for. */
export interface Sample {
	key: number;
	/** When the bytes were complete, milliseconds since the epoch. */
	receivedAt: number;
	/** The device's own time, in milliseconds; null where the protocol gives none. */
	sourceAt: number | null;
	raw: RawInput | null;
	/** OPC UA StatusCode the source itself gave; null where the protocol has none. */
	sourceQuality: number | null;
	fault: Fault | null;
	/** The last value still stands (keep-alive, unchanged poll): renews freshness, is neither stored nor fed. */
	confirms?: boolean;
	/** A retained message without a time of its own: its age is unknown. */
	retained?: boolean;
	/** Taken from a device's buffer, sent in order. */
	historical?: boolean;
	/** The source dropped values before this one (OPC UA overflow bit). */
	gapBefore?: boolean;
	/** How long the exchange took. */
	latencyMs?: number;
}

/** Undecoded input, as near to the wire as the client library lets us come. */
export type RawInput =
	| { kind: 'registers'; bytes: Uint8Array } // as on the wire, first register first
	| { kind: 'bit'; value: boolean }
	| { kind: 'variant'; dataType: string; value: unknown } // OPC UA built-in type name; Int64 and UInt64 as bigint
	| { kind: 'payload'; bytes: Uint8Array }
	| { kind: 'metric'; dataType: number; value: unknown }; // Sparkplug, type from the birth

/** Why there is no value. Codes are members of `domain/reason.ts`. */
export type Fault =
	| {
			code:
				'no-answer' | 'no-connection' | 'source-offline' | 'undecodable' | 'node-missing' | 'namespace-missing' | 'source-bad';
			detail?: string;
	  }
	| { code: 'exception'; exception: number; detail?: string };

/**
 * One connection to one device or broker. It never decodes, scales, judges or stores.
 * An address that cannot be read is a sample with a `fault`, never an exception.
 */
export interface Source {
	/** Connects. Rejects with a `SourceError` that carries advice. */
	open(emit: Emit, signal: AbortSignal): Promise<SourceLink>;
	/** Steps of a test before saving: each is named, passed or failed, and says what it found. Never throws. */
	test(signal: AbortSignal): Promise<TestReport>;
	/** Children of a node, for kinds that can be browsed; null where the kind cannot. */
	browse?(node: string | null, signal: AbortSignal): Promise<BrowseItem[]>;
}

export interface SourceLink {
	/** Takes the addresses wanted from now on; applies only the difference, so that the others lose no sample. */
	setAddresses(wanted: readonly WantedAddress[]): Promise<readonly AddressResult[]>;
	/** Resolves once `signal` has aborted and everything taken is handed over; rejects when the link is lost. */
	readonly closed: Promise<void>;
	/** What is wrong while the link itself stands: a silent unit, a refused address; null when all is well. */
	readonly advice?: Advice | null;
	/** Over the running connection, so that a device with one socket is not asked for a second. */
	test?(signal: AbortSignal): Promise<TestReport>;
	browse?(node: string | null, signal: AbortSignal): Promise<BrowseItem[]>;
}

/** Hands a batch on. Awaiting it is the back-pressure; its answer says what may be acknowledged upstream. */
export type Emit = (batch: readonly Sample[]) => Promise<EmitAnswer>;
export type EmitAnswer = 'stored' | 'spooled' | { dropped: number; reason: string };

export interface AddressResult {
	key: number;
	ok: boolean;
	detail?: string;
}

export interface TestStep {
	name: string;
	ok: boolean;
	detail: string;
	ms?: number;
}
export interface TestReport {
	ok: boolean;
	steps: TestStep[];
	/** One plain sentence of what is wrong and what to check first; null when all is well. */
	advice: Advice | null;
	/** A server certificate that is not trusted yet, to be looked at and trusted or not. */
	certificate?: CertificateFound;
}
export interface CertificateFound {
	fingerprint: string; // SHA-256, upper-case hex in pairs with colons
	subject: string;
	issuer: string;
	validFrom: string;
	validTo: string;
	der: Uint8Array;
}
export interface BrowseItem {
	node: string;
	name: string;
	hasChildren: boolean;
	isValue: boolean;
	dataType?: string | null;
	unit?: string | null;
	low?: number | null;
	high?: number | null;
	value?: string | null;
}

/** `code` is kebab-case and stable; `text` says what is wrong, `check` what to look at first. */
export interface Advice {
	code: string;
	text: string;
	check: string;
}

/** A failure to open or keep a link, with what to do about it. */
export class SourceError extends Error {
	readonly advice: Advice;
	readonly certificate: CertificateFound | undefined;
	constructor(advice: Advice, options?: { cause?: unknown; certificate?: CertificateFound }) {
		super(advice.text, { cause: options?.cause });
		this.name = 'SourceError';
		this.advice = advice;
		this.certificate = options?.certificate;
	}
}

/** What a source tells while it runs, for statistics, the event log and the last exchanges. All optional to call; cheap. */
export interface SourceObserver {
	event(level: 'note' | 'warning' | 'error', code: string, text: string): void;
	exchange(exchange: Exchange): void;
	/** Requests made (or publishes received), whether it worked, and how long it took. */
	request(worked: boolean, ms: number): void;
	/** Device clock minus our clock in milliseconds, where it can be known. */
	clockSkew(ms: number): void;
}
export interface Exchange {
	at: number;
	direction: 'out' | 'in' | 'none';
	/** Hex bytes, or a short text. */
	bytes: string;
	meaning: string;
	failed: boolean;
}

/** How the pki, clock and ids reach a source; nothing global. */
export interface SourceContext {
	observer: SourceObserver;
	/** Folder for certificates of this installation (OPC UA). */
	pkiFolder: string;
	/** Stable id of this installation, for client ids. */
	installationId: string;
	/** Wall clock in ms; a parameter so that tests can step it. */
	now(): number;
}
