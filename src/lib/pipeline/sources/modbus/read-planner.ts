// Pure.
import { inHole, planReads, widthOf, type Hole, type KeyedAddress, type ReadBlock } from './read-plan.ts';

/** A register that a device refused is asked again this rarely. */
const PROBE_MS = 60_000;

export interface TimedAddress extends KeyedAddress {
	intervalMs: number;
}

interface KnownHole extends Hole {
	/** When it is asked again, monotonic milliseconds; never for a gap, which nobody wants. */
	probeAt: number;
	code: number;
	isGap: boolean;
}

/** A hole that is due, and the addresses to ask it for, each alone. */
export interface Probe {
	hole: Hole;
	blocks: readonly ReadBlock[];
}

/** What is wanted of a connection and what its devices are known to refuse; from both, the reads of a round. Times are monotonic milliseconds. */
export class ReadPlanner {
	#items: readonly TimedAddress[] = [];
	#holes: KnownHole[] = [];
	#plans = new Map<string, ReadBlock[]>();
	/** Most registers a read; less than the setting once the device has refused as many. */
	#most: number;

	constructor(maxRegisters: number) {
		this.#most = maxRegisters;
	}

	/** Takes what is wanted from now on; holes that stay holes are remembered. */
	want(items: readonly TimedAddress[]): void {
		this.#items = items;
		// What was a gap may be wanted now.
		this.#holes = this.#holes.filter((hole) => !hole.isGap || !items.some((item) => inHole(item.address, [hole])));
		this.#plans.clear();
	}

	/** Wanted units in order. */
	get units(): number[] {
		return [...new Set(this.#items.map((item) => item.address.unitId))].sort((a, b) => a - b);
	}

	/** The newest wanted register that is refused; null where none is. */
	get newestRefused(): (Hole & { code: number }) | null {
		return this.#holes.findLast((hole) => !hole.isGap) ?? null;
	}

	/** Reads of a round in which these intervals are due. */
	blocksOf(intervals: readonly number[]): readonly ReadBlock[] {
		const key = intervals.join(',');
		let plan = this.#plans.get(key);
		if (!plan) {
			const due = new Set(intervals);
			plan = this.#plan((item) => due.has(item.intervalMs));
			this.#plans.set(key, plan);
		}
		return plan;
	}

	/** The first read of a unit, to see whether it answers; null where nothing of it can be read. */
	firstBlockOf(unitId: number): ReadBlock | null {
		return this.#plan((item) => item.address.unitId === unitId)[0] ?? null;
	}

	#plan(isDue: (item: TimedAddress) => boolean): ReadBlock[] {
		return planReads(
			this.#items.filter((item) => isDue(item) && !inHole(item.address, this.#holes)),
			this.#holes,
			this.#most,
		);
	}

	/** Reads of some addresses, such as one half of a refused read. */
	partsOf(items: readonly KeyedAddress[]): readonly ReadBlock[] {
		return planReads(items, this.#holes, this.#most);
	}

	/**
	 * A read was refused and both its halves answered whole. Then what the device refuses lies between them, where nobody wanted anything;
	 * or, where nothing lies between, it gives fewer registers at once (code 3). Answers the new most in that case, else null.
	 */
	halvesAnswered(block: ReadBlock, code: number): number | null {
		const [lower, upper] = halvesOf(block);
		const from = Math.max(...lower.map(({ address }) => address.register + widthOf(address)));
		const to = Math.min(...upper.map(({ address }) => address.register));
		this.#plans.clear();
		if (to > from) {
			const { unitId, table } = block;
			this.#holes.push({ unitId, table, from, to, probeAt: Number.POSITIVE_INFINITY, code, isGap: true });
			return null;
		}
		if (code !== 3) return null;
		this.#most = Math.max(1, Math.min(this.#most, Math.ceil(block.count / 2)));
		return this.#most;
	}

	/** A wanted address is refused by itself. Answers true when that was not known. */
	refused({ address }: KeyedAddress, code: number, now: number): boolean {
		const { unitId, table, register: from } = address;
		const hole = { unitId, table, from, to: from + widthOf(address), probeAt: now + PROBE_MS, code, isGap: false };
		const isNew = !this.#holes.some((other) => isSameStretch(other, hole) && other.code === code);
		this.#holes = [...this.#holes.filter((other) => !isSameStretch(other, hole)), hole];
		this.#plans.clear();
		return isNew;
	}

	/** Refused registers that are due, of the intervals of this round. */
	probesOf(intervals: readonly number[], now: number): Probe[] {
		return this.#holes
			.filter((hole) => hole.probeAt <= now)
			.map((hole) => ({
				hole,
				blocks: this.#items
					.filter((item) => intervals.includes(item.intervalMs) && inHole(item.address, [hole]))
					.map((item) => blockOf(item)),
			}))
			.filter(({ blocks }) => blocks.length > 0);
	}

	/** A hole was asked for; it is due again in a minute. One that nobody could ask for now stays due. */
	probed(hole: Hole, now: number): void {
		this.#holes = this.#holes.map((one) => (isSameStretch(one, hole) ? { ...one, probeAt: now + PROBE_MS } : one));
	}

	/** A refused address answered: its registers are a hole no more, what is left of the hole still is. */
	answered({ unitId, table, start, count }: ReadBlock): void {
		const end = start + count;
		this.#holes = this.#holes.flatMap((one) => {
			if (one.unitId !== unitId || one.table !== table || one.to <= start || end <= one.from) return [one];
			return [
				{ ...one, to: start },
				{ ...one, from: end },
			].filter((rest) => rest.to > rest.from);
		});
		this.#plans.clear();
	}
}

/** A refused read's addresses in two, from which the one refused register is found. */
export function halvesOf({ items }: ReadBlock): [lower: readonly KeyedAddress[], upper: readonly KeyedAddress[]] {
	const middle = items.length >> 1;
	return [items.slice(0, middle), items.slice(middle)];
}

function isSameStretch(a: Hole, b: Hole): boolean {
	return a.unitId === b.unitId && a.table === b.table && a.from === b.from && a.to === b.to;
}

function blockOf(item: KeyedAddress): ReadBlock {
	const { unitId, table, register } = item.address;
	return { unitId, table, start: register, count: widthOf(item.address), items: [item] };
}
