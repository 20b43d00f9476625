// Edge: sources. May touch: node-opcua. Which addresses are wanted, and the items on the server that stand for them.
import {
	AttributeIds,
	ClientMonitoredItemGroup,
	type ClientSession,
	type DataValue,
	NumericRange,
	TimestampsToReturn,
} from 'node-opcua';
import type { OpcuaSettings } from '#lib/domain/source-settings.ts';
import type { AddressResult, Fault, SourceContext, WantedAddress } from '../source.ts';
import { Lane, type Item, type LaneListener } from './lane.ts';
import { resolveNodeId } from './namespace.ts';
import { within, type OpenSession } from './session.ts';
import { toSample } from './variant-input.ts';

/** Items created in one call; servers bound it, and many small calls would flood a weak one. */
const ITEMS_PER_CALL = 100;

interface Creation {
	item: Item;
	nodeId: string;
	indexRange: string | null;
}

/** The library has the service and leaves it out of the session's type. */
async function deleteItems(session: ClientSession, subscriptionId: number, monitoredItemIds: number[]): Promise<void> {
	const service = session as unknown as {
		deleteMonitoredItems(request: { subscriptionId: number; monitoredItemIds: number[] }): Promise<unknown>;
	};
	await service.deleteMonitoredItems({ subscriptionId, monitoredItemIds });
}

/** Resolves once the server has answered for each item; rejects where it refused all of them together. */
function created(group: ClientMonitoredItemGroup): Promise<void> {
	return new Promise((resolve, reject) => {
		group.on('initialized', resolve);
		group.on('err', (message) => reject(new Error(message)));
	});
}

/** Keeps the server's items as they are wanted, in one subscription however many sampling rates: servers allow few publish requests. */
export class MonitoredItems {
	readonly #settings: OpcuaSettings;
	readonly #context: SourceContext;
	readonly #open: OpenSession;
	readonly #listener: LaneListener;
	readonly #items = new Map<number, Item>();
	#lane: Lane | null = null;
	/** Changes of addresses take turns. */
	#changing: Promise<unknown> = Promise.resolve();

	constructor(settings: OpcuaSettings, context: SourceContext, open: OpenSession, listener: LaneListener) {
		this.#settings = settings;
		this.#context = context;
		this.#open = open;
		this.#listener = listener;
	}

	/** The subscription; null until something is wanted. */
	get lane(): Lane | null {
		return this.#lane;
	}

	get size(): number {
		return this.#items.size;
	}

	/** Why each item that is not created is not. */
	get faults(): Fault[] {
		return [...this.#items.values()].flatMap((item) => item.fault ?? []);
	}

	/** Takes what is wanted from now on; creates and deletes only the difference. */
	want(wanted: readonly WantedAddress[]): Promise<readonly AddressResult[]> {
		const change = this.#changing.then(() => this.#apply(wanted));
		this.#changing = change.catch(() => undefined);
		return change;
	}

	/** Asks again for what the server refused. */
	retryRefused(): Promise<void> {
		const change = this.#changing.then(() => this.#create([...this.#items.values()].filter((item) => item.fault)));
		this.#changing = change.catch(() => undefined);
		return change;
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
		for (const item of items) {
			this.#items.delete(item.key);
			this.#lane?.items.delete(item);
		}
		const ids = items.flatMap((item) => item.monitoredItemId ?? []);
		if (this.#lane && ids.length > 0) await deleteItems(this.#open.session, this.#lane.subscription.subscriptionId, ids);
	}

	async #create(items: readonly Item[]): Promise<void> {
		const byInterval = new Map<number, Creation[]>();
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
		if (byInterval.size === 0) return;
		this.#lane ??= await Lane.open(this.#open.session, this.#settings.publishing_interval_ms, this.#listener);
		for (const [samplingMs, list] of byInterval)
			for (let start = 0; start < list.length; start += ITEMS_PER_CALL)
				await this.#createBatch(this.#lane, samplingMs, list.slice(start, start + ITEMS_PER_CALL));
	}

	async #createBatch(lane: Lane, samplingMs: number, list: readonly Creation[]): Promise<void> {
		const group = ClientMonitoredItemGroup.create(
			lane.subscription,
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
		);
		// Heard from the start: the first values may come in one piece with the answer that the items are created.
		group.on('changed', (_, dataValue, index) => this.#changed(list[index]?.item, dataValue));
		try {
			await within(created(group), 20_000, 'creating items');
		} catch (error) {
			if (list.length === 1 || !/TooMany|TooLarge|EncodingLimits/.test((error as Error).message)) throw error;
			// A server that takes fewer at once is asked for half as many.
			const middle = list.length >> 1;
			await this.#createBatch(lane, samplingMs, list.slice(0, middle));
			await this.#createBatch(lane, samplingMs, list.slice(middle));
			return;
		}
		list.forEach(({ item }, index) => {
			const made = group.monitoredItems[index];
			const status = made?.statusCode;
			if (made && status && status.value >>> 30 === 0) {
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

	#changed(item: Item | undefined, dataValue: DataValue): void {
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
		this.#listener.hand(sample);
	}

	#refuse(item: Item, fault: Fault): void {
		if (!item.fault)
			this.#context.observer.event(
				'warning',
				fault.code,
				`tag id ${item.key}: ${fault.detail ?? fault.code}; asked for again once a minute`,
			);
		item.fault = fault;
		this.#listener.hand({
			key: item.key,
			receivedAt: this.#context.now(),
			sourceAt: null,
			raw: null,
			sourceQuality: null,
			fault,
		});
	}
}
