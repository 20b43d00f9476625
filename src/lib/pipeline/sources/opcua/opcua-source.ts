// Edge: sources. May touch: node-opcua. Not: database, tag map, scaling.
import {
	AttributeIds,
	type ClientMonitoredItemGroup,
	type ClientSession,
	type ClientSubscription,
	NumericRange,
	TimestampsToReturn,
} from 'node-opcua';
import type { OpcuaSettings } from '#lib/domain/source-settings.ts';
import type {
	AddressResult,
	Emit,
	Fault,
	Sample,
	Source,
	SourceContext,
	SourceLink,
	TestReport,
	TestStep,
	WantedAddress,
} from '../source.ts';
import { SourceError } from '../source.ts';
import { adviceOf, skewWords } from './advice.ts';
import { browseNode } from './browse.ts';
import { resolveNodeId } from './namespace.ts';
import { findEndpoints, openSession, within, type OpenSession } from './session.ts';
import { toSample } from './variant-input.ts';

/** Items created in one call; servers bound it, and many small calls would flood a weak one. */
const ITEMS_PER_CALL = 100;
/** The server says at least this often that it lives. */
const KEEP_ALIVE_MS = 4_000;
/** Constant values are confirmed this often while the server lives. */
const CONFIRM_MS = 3_000;
/** Nodes that are missing are asked for again this rarely. */
const MISSING_RETRY_MS = 60_000;
const SKEW_MS = 60_000;
/** Batches handed on and not yet taken; beyond this they are joined. */
const MOST_UNDERWAY = 16;

interface Item {
	key: number;
	wanted: WantedAddress;
	lane: Lane | null;
	monitoredItemId: number | null;
	/** The newest status was good: a keep-alive confirms the value. */
	isGood: boolean;
	hasValue: boolean;
	createdMono: number;
	fault: Fault | null;
}

/** A subscription at one publishing rate. */
interface Lane {
	intervalMs: number;
	subscription: ClientSubscription;
	items: Set<Item>;
	heardMono: number;
	keepAliveMs: number;
}

/** Reads an OPC UA server by subscription. */
export function createOpcuaSource(settings: OpcuaSettings, context: SourceContext): Source {
	return {
		async open(emit, signal) {
			const opening = openSession(settings, context);
			// A stop does not wait for a server that is slow to answer; what opens after it is closed again.
			const aborted = new Promise<never>((_, reject) => {
				const stop = () => reject(new SourceError(adviceOf('closed', settings.endpoint_url)));
				if (signal.aborted) stop();
				else signal.addEventListener('abort', stop, { once: true });
			});
			aborted.catch(() => undefined);
			let open: OpenSession;
			try {
				open = await Promise.race([opening, aborted]);
			} catch (error) {
				opening.then((late) => late.close()).catch(() => undefined);
				throw error;
			}
			return new OpcuaLink(settings, context, open, emit, signal);
		},
		test: () => testServer(settings, context),
		async browse(node) {
			const open = await openSession(settings, context);
			try {
				return await browseNode(open.session, open.namespaces, node);
			} finally {
				await open.close();
			}
		},
	};
}

async function testServer(settings: OpcuaSettings, context: SourceContext): Promise<TestReport> {
	const steps: TestStep[] = [];
	const begun = performance.now();
	try {
		const endpoints = await findEndpoints(settings, context);
		steps.push({
			name: 'Connection',
			ok: true,
			detail: `${settings.endpoint_url} answers`,
			ms: Math.round(performance.now() - begun),
		});
		const offered = [
			...new Set(
				endpoints.map(
					(endpoint) =>
						`${['Invalid', 'None', 'Sign', 'SignAndEncrypt'][endpoint.securityMode] ?? '?'} ${(endpoint.securityPolicyUri ?? '').split('#')[1] ?? ''}`,
				),
			),
		];
		steps.push({ name: 'Security offered', ok: true, detail: offered.join('; ') });
		const other = endpoints
			.map((endpoint) => endpoint.endpointUrl ?? '')
			.find((url) => url !== '' && hostOf(url) !== hostOf(settings.endpoint_url));
		if (other)
			steps.push({
				name: 'Advertised address',
				ok: true,
				detail: `the server calls itself ${other}; ${settings.endpoint_url} is kept`,
			});
	} catch (error) {
		const advice = adviceOf((error as Error).message, settings.endpoint_url);
		steps.push({ name: 'Connection', ok: false, detail: advice.text });
		return { ok: false, steps, advice };
	}
	try {
		const open = await openSession(settings, context);
		steps.push({
			name: 'Session',
			ok: true,
			detail: settings.user_name ? `opened as ${settings.user_name}` : 'opened without a user name',
		});
		const skew = await readSkew(open, context);
		if (skew !== null)
			steps.push({
				name: 'Clock',
				ok: skewWords(skew) === null,
				detail: skewWords(skew) ?? `within ${Math.max(1, Math.ceil(Math.abs(skew) / 1_000))} s of ours`,
			});
		steps.push({ name: 'Namespaces', ok: true, detail: open.namespaces.slice(1).join('; ') || 'only the standard one' });
		await open.close();
		return { ok: true, steps, advice: null };
	} catch (error) {
		const failure =
			error instanceof SourceError ? error : new SourceError(adviceOf((error as Error).message, settings.endpoint_url));
		steps.push({ name: 'Session', ok: false, detail: failure.advice.text });
		return { ok: false, steps, advice: failure.advice, ...(failure.certificate ? { certificate: failure.certificate } : {}) };
	}
}

function hostOf(url: string): string {
	return /^opc\.tcp:\/\/([^/]+)/.exec(url)?.[1]?.toLowerCase() ?? url;
}

/** The server's clock minus ours, milliseconds; null where it does not tell. Half the way there is taken off. */
async function readSkew(open: OpenSession, context: SourceContext): Promise<number | null> {
	const begun = performance.now();
	const read = await open.session.read({ nodeId: 'i=2258', attributeId: AttributeIds.Value });
	const time: unknown = read.value.value;
	return time instanceof Date ? time.getTime() - (context.now() - (performance.now() - begun) / 2) : null;
}

/** The library has the service and leaves it out of the session's type. */
async function deleteItems(session: ClientSession, subscriptionId: number, monitoredItemIds: number[]): Promise<void> {
	const service = session as unknown as {
		deleteMonitoredItems(request: { subscriptionId: number; monitoredItemIds: number[] }): Promise<unknown>;
	};
	await service.deleteMonitoredItems({ subscriptionId, monitoredItemIds });
}

class OpcuaLink implements SourceLink {
	readonly closed: Promise<void>;
	readonly #settings: OpcuaSettings;
	readonly #context: SourceContext;
	readonly #open: OpenSession;
	readonly #emit: Emit;
	readonly #items = new Map<number, Item>();
	readonly #lanes = new Map<number, Lane>();
	readonly #underway = new Set<Promise<unknown>>();
	readonly #timers: NodeJS.Timeout[] = [];
	#outgoing: Sample[] = [];
	#isFlushing = false;
	#isEnded = false;
	#settle: { resolve(): void; reject(error: Error): void } = { resolve: () => undefined, reject: () => undefined };
	/** Changes of addresses take turns. */
	#changing: Promise<unknown> = Promise.resolve();

	constructor(settings: OpcuaSettings, context: SourceContext, open: OpenSession, emit: Emit, signal: AbortSignal) {
		this.#settings = settings;
		this.#context = context;
		this.#open = open;
		this.#emit = emit;
		this.closed = new Promise<void>((resolve, reject) => (this.#settle = { resolve, reject }));
		this.closed.catch(() => undefined);
		for (const event of ['connection_lost', 'close', 'abort'] as const)
			open.client.on(event, () => this.#lost('the connection was lost'));
		open.session.on('session_closed', () => this.#lost('the session was closed'));
		open.session.on('keepalive_failure', () => this.#lost('the session was lost'));
		signal.addEventListener('abort', () => void this.#end(), { once: true });
		this.#every(1_000, () => this.#watch());
		this.#every(CONFIRM_MS, () => this.#confirm());
		this.#every(MISSING_RETRY_MS, () => this.#retryMissing());
		this.#every(SKEW_MS, () => void this.#readSkew());
		void this.#readSkew();
		if (signal.aborted) void this.#end();
	}

	#every(ms: number, work: () => void): void {
		this.#timers.push(setInterval(work, ms));
	}

	setAddresses(wanted: readonly WantedAddress[]): Promise<readonly AddressResult[]> {
		const change = this.#changing.then(() => this.#apply(wanted));
		this.#changing = change.catch(() => undefined);
		return change;
	}

	browse(node: string | null) {
		return browseNode(this.#open.session, this.#open.namespaces, node);
	}

	async test(): Promise<TestReport> {
		const begun = performance.now();
		let skew: number | null;
		try {
			skew = await within(readSkew(this.#open, this.#context), 5_000, this.#settings.endpoint_url);
		} catch (error) {
			const advice = adviceOf((error as Error).message, this.#settings.endpoint_url);
			return { ok: false, steps: [{ name: 'Session', ok: false, detail: advice.text }], advice };
		}
		const missing = [...this.#items.values()].filter((item) => item.fault);
		const steps: TestStep[] = [
			{
				name: 'Session',
				ok: true,
				detail: `stands, answers in ${Math.round(performance.now() - begun)} ms`,
				ms: Math.round(performance.now() - begun),
			},
			{
				name: 'Nodes',
				ok: missing.length === 0,
				detail:
					missing.length === 0 ? `all ${this.#items.size} are there` : `${missing.length} of ${this.#items.size} are missing`,
			},
		];
		if (skew !== null)
			steps.push({ name: 'Clock', ok: skewWords(skew) === null, detail: skewWords(skew) ?? 'in step with ours' });
		return { ok: steps.every((step) => step.ok), steps, advice: this.advice };
	}

	get advice() {
		const missing = [...this.#items.values()].filter((item) => item.fault);
		if (missing.length === 0) return null;
		return {
			code: 'nodes-missing',
			text: `${missing.length} of ${this.#items.size} nodes are not on the server.`,
			check: 'Check whether its configuration changed; browse it and map the nodes anew, or take the rows out.',
		};
	}

	async #apply(wanted: readonly WantedAddress[]): Promise<AddressResult[]> {
		const fresh: Item[] = [];
		const keep = new Set<number>();
		for (const one of wanted) {
			const known = this.#items.get(one.key);
			if (known && JSON.stringify(known.wanted) === JSON.stringify(one)) {
				keep.add(one.key);
				continue;
			}
			fresh.push({
				key: one.key,
				wanted: one,
				lane: null,
				monitoredItemId: null,
				isGood: false,
				hasValue: false,
				createdMono: performance.now(),
				fault: null,
			});
		}
		await this.#remove([...this.#items.values()].filter((item) => !keep.has(item.key)));
		for (const item of fresh) this.#items.set(item.key, item);
		await this.#create(fresh);
		return wanted.map(({ key }) => {
			const fault = this.#items.get(key)?.fault ?? null;
			return fault ? { key, ok: false, detail: fault.detail ?? fault.code } : { key, ok: true };
		});
	}

	async #remove(items: readonly Item[]): Promise<void> {
		for (const item of items) this.#items.delete(item.key);
		for (const lane of this.#lanes.values()) {
			const own = items.filter((item) => item.lane === lane);
			const ids = own.flatMap((item) => item.monitoredItemId ?? []);
			for (const item of own) lane.items.delete(item);
			if (ids.length > 0) await deleteItems(this.#open.session, lane.subscription.subscriptionId, ids);
		}
	}

	async #create(items: readonly Item[]): Promise<void> {
		const byInterval = new Map<number, { item: Item; nodeId: string; indexRange: string | null }[]>();
		for (const item of items) {
			const { address } = item.wanted;
			if (address.kind !== 'opcua') {
				this.#refuse(item, { code: 'undecodable', detail: `a ${address.kind} address on an OPC UA source` });
				continue;
			}
			const resolved = resolveNodeId(address.nodeId, this.#open.namespaces);
			if (!resolved.ok) {
				this.#refuse(item, {
					code: resolved.reason === 'namespace-missing' ? 'namespace-missing' : 'node-missing',
					detail: resolved.detail,
				});
				continue;
			}
			const list = byInterval.get(item.wanted.intervalMs) ?? [];
			list.push({ item, nodeId: resolved.nodeId, indexRange: address.indexRange });
			byInterval.set(item.wanted.intervalMs, list);
		}
		// One subscription for the one publishing rate, however many sampling rates: servers allow few publish requests.
		if (byInterval.size === 0) return;
		const lane = await this.#laneOf(this.#settings.publishing_interval_ms);
		for (const [samplingMs, list] of byInterval) {
			for (let start = 0; start < list.length; start += ITEMS_PER_CALL) {
				await this.#createBatch(lane, samplingMs, list.slice(start, start + ITEMS_PER_CALL));
			}
		}
	}

	async #laneOf(intervalMs: number): Promise<Lane> {
		const known = this.#lanes.get(intervalMs);
		if (known) return known;
		const keepAliveCount = Math.max(1, Math.ceil(KEEP_ALIVE_MS / intervalMs));
		const subscription = await within(
			this.#open.session.createSubscription2({
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
		const lane: Lane = {
			intervalMs,
			subscription,
			items: new Set(),
			heardMono: performance.now(),
			keepAliveMs: Math.max(subscription.publishingInterval * keepAliveCount, KEEP_ALIVE_MS),
		};
		const heard = () => {
			lane.heardMono = performance.now();
			this.#context.observer.request(true, 0);
		};
		subscription.on('keepalive', () => {
			heard();
			this.#confirmLane(lane);
		});
		subscription.on('received_notifications', heard);
		subscription.on('terminated', () => this.#lost('the server ended the subscription'));
		subscription.on('internal_error', (error: Error) => this.#lost(error.message));
		this.#lanes.set(intervalMs, lane);
		return lane;
	}

	async #createBatch(
		lane: Lane,
		samplingMs: number,
		list: readonly { item: Item; nodeId: string; indexRange: string | null }[],
	): Promise<void> {
		let group: ClientMonitoredItemGroup;
		try {
			group = await within(
				lane.subscription.monitorItems(
					list.map(({ nodeId, indexRange }) => ({
						nodeId,
						attributeId: AttributeIds.Value,
						...(indexRange ? { indexRange: new NumericRange(indexRange) } : {}),
					})),
					{
						samplingInterval: samplingMs,
						discardOldest: true,
						// Room for every sample between two publishings, and one more.
						queueSize: Math.max(2, Math.ceil(lane.intervalMs / samplingMs) + 1),
					},
					TimestampsToReturn.Both,
				),
				20_000,
				'creating items',
			);
		} catch (error) {
			if (list.length === 1 || !/TooMany|TooLarge|EncodingLimits/.test((error as Error).message)) throw error;
			// A server that takes fewer at once is asked for half as many.
			const middle = list.length >> 1;
			await this.#createBatch(lane, samplingMs, list.slice(0, middle));
			await this.#createBatch(lane, samplingMs, list.slice(middle));
			return;
		}
		group.on('changed', (_, dataValue, index) => {
			const item = list[index]?.item;
			if (!item || this.#items.get(item.key) !== item) return;
			const sample = toSample(item.key, dataValue, this.#context.now());
			item.hasValue = true;
			item.isGood = (sample.sourceQuality ?? 0) >>> 30 === 0;
			if (sample.gapBefore)
				this.#context.observer.event(
					'warning',
					'values-dropped',
					`the server dropped values between two publishings (node of tag id ${item.key}): sample more slowly or publish more often`,
				);
			this.#hand(sample);
		});
		list.forEach(({ item }, index) => {
			const made = group.monitoredItems[index];
			const status = made?.statusCode;
			if (made && status && status.value >>> 30 === 0) {
				item.lane = lane;
				item.monitoredItemId = made.monitoredItemId ?? null;
				item.createdMono = performance.now();
				item.fault = null;
				lane.items.add(item);
			} else {
				const name = status?.name ?? 'not created';
				this.#refuse(item, { code: /NodeId|AttributeId/.test(name) ? 'node-missing' : 'source-bad', detail: name });
			}
		});
	}

	#refuse(item: Item, fault: Fault): void {
		if (!item.fault)
			this.#context.observer.event(
				'warning',
				fault.code,
				`tag id ${item.key}: ${fault.detail ?? fault.code}; asked for again once a minute`,
			);
		item.fault = fault;
		this.#hand({ key: item.key, receivedAt: this.#context.now(), sourceAt: null, raw: null, sourceQuality: null, fault });
	}

	#retryMissing(): void {
		this.#changing = this.#changing
			.then(() => this.#create([...this.#items.values()].filter((item) => item.fault && !this.#isEnded)))
			.catch((error: Error) => this.#lost(error.message));
	}

	/** Samples of one notification go on together. */
	#hand(sample: Sample): void {
		this.#outgoing.push(sample);
		if (this.#isFlushing) return;
		this.#isFlushing = true;
		setImmediate(() => this.#flush());
	}

	#flush(): void {
		this.#isFlushing = false;
		if (this.#outgoing.length === 0) return;
		if (this.#underway.size >= MOST_UNDERWAY) {
			this.#isFlushing = true;
			void Promise.race(this.#underway).then(() => this.#flush());
			return;
		}
		const batch = this.#outgoing;
		this.#outgoing = [];
		const handed: Promise<unknown> = this.#emit(batch)
			.catch(() => undefined)
			.finally(() => this.#underway.delete(handed));
		this.#underway.add(handed);
	}

	/** While the server lives it would have told of a change: what it last said still stands. */
	#confirm(): void {
		const now = performance.now();
		for (const lane of this.#lanes.values()) if (now - lane.heardMono < lane.keepAliveMs * 1.5) this.#confirmLane(lane);
	}

	#confirmLane(lane: Lane): void {
		const receivedAt = this.#context.now();
		for (const item of lane.items) {
			if (item.hasValue && item.isGood)
				this.#hand({ key: item.key, receivedAt, sourceAt: null, raw: null, sourceQuality: null, fault: null, confirms: true });
		}
	}

	/** A socket may stay open over a dead server, and items may be created and never speak: both are a lost link. */
	#watch(): void {
		const now = performance.now();
		for (const lane of this.#lanes.values()) {
			if (now - lane.heardMono > lane.keepAliveMs * 3) {
				this.#lost('the server did not answer: no word from its subscription');
				return;
			}
			for (const item of lane.items) {
				if (!item.hasValue && now - item.createdMono > lane.intervalMs * 2 + 10_000) {
					this.#lost('items were created and never got a first value; the subscription is made anew');
					return;
				}
			}
		}
	}

	async #readSkew(): Promise<void> {
		try {
			const skew = await readSkew(this.#open, this.#context);
			if (skew === null) return;
			this.#context.observer.clockSkew(skew);
			const words = skewWords(skew);
			if (words) this.#context.observer.event('warning', 'clock-skew', words);
		} catch {
			// The watch tells of a server that does not answer.
		}
	}

	#lost(why: string): void {
		if (this.#isEnded) return;
		this.#isEnded = true;
		for (const timer of this.#timers) clearInterval(timer);
		this.#flush();
		this.#settle.reject(new SourceError(adviceOf(why, this.#settings.endpoint_url), { cause: new Error(why) }));
		void this.#open.close().catch(() => undefined);
	}

	async #end(): Promise<void> {
		if (this.#isEnded) return;
		this.#isEnded = true;
		for (const timer of this.#timers) clearInterval(timer);
		await this.#open.close().catch(() => undefined);
		// Everything taken is handed over before the link counts as closed.
		while (this.#outgoing.length > 0 || this.#underway.size > 0) {
			this.#flush();
			await Promise.allSettled(this.#underway);
		}
		this.#settle.resolve();
	}
}
