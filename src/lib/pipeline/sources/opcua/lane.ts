// Edge: sources. May touch: node-opcua. One subscription at its publishing rate, and whether its server still speaks.
import type { ClientSession, ClientSubscription } from 'node-opcua';
import type { Fault, Sample, WantedAddress } from '../source.ts';
import { within } from './session.ts';

/** The server says at least this often that it lives. */
const KEEP_ALIVE_MS = 4_000;
/** An item that was created and has not spoken by then, over two publishings, never will. */
const FIRST_VALUE_MS = 10_000;

/** A wanted address and what became of it. */
export interface Item {
	key: number;
	wanted: WantedAddress;
	/** The server's id; null while it is not created. */
	monitoredItemId: number | null;
	/** The newest status was good: a keep-alive confirms the value. */
	isGood: boolean;
	hasValue: boolean;
	createdMono: number;
	fault: Fault | null;
}

/** Whom a lane tells. */
export interface LaneListener {
	/** A word from the server, with values or without. */
	heard(): void;
	hand(sample: Sample): void;
	/** The subscription ended, and why. */
	ended(why: string): void;
	/** Wall clock, milliseconds. */
	now(): number;
}

/** A subscription with the items created in it. */
export class Lane {
	readonly intervalMs: number;
	readonly subscription: ClientSubscription;
	readonly items = new Set<Item>();
	readonly #listener: LaneListener;
	readonly #keepAliveMs: number;
	#heardMono = performance.now();

	/** Creates the subscription; rejects where the server does not within 10 s. */
	static async open(session: ClientSession, intervalMs: number, listener: LaneListener): Promise<Lane> {
		const keepAliveCount = Math.max(1, Math.ceil(KEEP_ALIVE_MS / intervalMs));
		const subscription = await within(
			session.createSubscription2({
				requestedPublishingInterval: intervalMs,
				requestedMaxKeepAliveCount: keepAliveCount,
				requestedLifetimeCount: Math.max(60, keepAliveCount * 6),
				maxNotificationsPerPublish: 0,
				publishingEnabled: true,
				priority: 1,
			}),
			10_000,
			'the subscription',
		);
		const keepAliveMs = Math.max(subscription.publishingInterval * keepAliveCount, KEEP_ALIVE_MS);
		return new Lane(intervalMs, subscription, keepAliveMs, listener);
	}

	private constructor(intervalMs: number, subscription: ClientSubscription, keepAliveMs: number, listener: LaneListener) {
		this.intervalMs = intervalMs;
		this.subscription = subscription;
		this.#keepAliveMs = keepAliveMs;
		this.#listener = listener;
		const heard = () => {
			this.#heardMono = performance.now();
			listener.heard();
		};
		subscription.on('keepalive', () => {
			heard();
			this.#confirm();
		});
		subscription.on('received_notifications', heard);
		subscription.on('terminated', () => listener.ended('the server ended the subscription'));
		subscription.on('internal_error', (error: Error) => listener.ended(error.message));
	}

	/** While the server lives it would have told of a change: what it last said still stands. */
	confirmWhileAlive(): void {
		if (performance.now() - this.#heardMono < this.#keepAliveMs * 1.5) this.#confirm();
	}

	#confirm(): void {
		const receivedAt = this.#listener.now();
		for (const { key, hasValue, isGood } of this.items) {
			if (hasValue && isGood)
				this.#listener.hand({
					key,
					receivedAt,
					sourceAt: null,
					raw: null,
					sourceQuality: null,
					fault: null,
					confirms: true,
				});
		}
	}

	/** Why this lane counts as lost though nobody said so; null while it is well. A socket may stay open over a dead server. */
	whyLost(): string | null {
		const now = performance.now();
		if (now - this.#heardMono > this.#keepAliveMs * 3) return 'the server did not answer: no word from its subscription';
		for (const item of this.items)
			if (!item.hasValue && now - item.createdMono > this.intervalMs * 2 + FIRST_VALUE_MS)
				return 'items were created and never got a first value; the subscription is made anew';
		return null;
	}
}
