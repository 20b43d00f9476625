// Edge: sources. May touch: modbus-serial through link.ts. Not: database, tag map, scaling.
import type { ModbusSettings } from '#lib/domain/source-settings.ts';
import type { Emit, Sample, Source, SourceContext, SourceLink, TestReport, TestStep, WantedAddress } from '../source.ts';
import { SourceError, type Advice } from '../source.ts';
import { connectAdvice, silentAdvice, unitAdvice } from './advice.ts';
import { asksForPatience, exceptionWords } from './exception-code.ts';
import { exceptionExchange, requestBytes, requestWords } from './frame.ts';
import { ModbusLink, placeOf } from './link.ts';
import { inHole, isBitTable, planReads, widthOf, type Hole, type KeyedAddress, type ReadBlock } from './read-plan.ts';
import { afterRound, startRounds, type Rounds } from './schedule.ts';
import { UnitBreaker } from './unit-breaker.ts';

/** A register that a device refused is asked again this rarely. */
const HOLE_PROBE_MS = 60_000;
/** Batches handed on and not yet taken; then polling waits, which is the back-pressure. */
const MOST_UNDERWAY = 8;
/** A connection that cannot be made again this often in a row is lost. */
const RECONNECTS = 3;

interface KnownHole extends Hole {
	probeAt: number;
	code: number;
	/** Between wanted registers, wanted by nobody: never asked again. */
	isGap: boolean;
}

/** A unit that is busy is left alone this long. */
const PATIENCE_MS = 1_000;

/** Reads a Modbus device or gateway on a schedule: planned block reads, one request in flight, holes remembered, silent units asked rarely. */
export function createModbusSource(settings: ModbusSettings, context: SourceContext): Source {
	return {
		async open(emit, signal) {
			const link = new ModbusLink(settings);
			try {
				await link.connect();
			} catch (error) {
				throw new SourceError(connectAdvice(error as Error & { code?: string }, placeOf(settings)), { cause: error });
			}
			return new Poller(settings, context, link, emit, signal);
		},
		async test(signal) {
			const link = new ModbusLink(settings);
			const begun = performance.now();
			try {
				await link.connect();
			} catch (error) {
				const advice = connectAdvice(error as Error & { code?: string }, placeOf(settings));
				return { ok: false, steps: [{ name: 'Connection', ok: false, detail: advice.text }], advice };
			}
			const steps: TestStep[] = [
				{ name: 'Connection', ok: true, detail: `${placeOf(settings)} is open`, ms: Math.round(performance.now() - begun) },
			];
			// Before anything is mapped nobody knows which units there are: the first is asked for one register. An exception is an answer too.
			const step = await testUnit(link, 1, signal);
			link.drop();
			steps.push(step.ok ? step : { ...step, detail: `${step.detail}; other units can be asked once tags are mapped to them` });
			return { ok: step.ok, steps, advice: step.ok ? null : silentAdvice(placeOf(settings), [1], settings.timeout_ms) };
		},
	};
}

async function testUnit(link: ModbusLink, unitId: number, signal: AbortSignal): Promise<TestStep> {
	const name = `Unit ${unitId}`;
	if (signal.aborted) return { name, ok: false, detail: 'not asked, the time was up' };
	const outcome = await link.read(unitId, 'input-register', 0, 1);
	const ms = Math.round(outcome.ms);
	if (outcome.kind === 'answer') return { name, ok: true, detail: `answers in ${ms} ms`, ms };
	if (outcome.kind === 'exception')
		// Every exception proves that somebody lives there, but those by which a gateway says that nobody does.
		return { name, ok: outcome.code !== 10 && outcome.code !== 11, detail: `answers with ${exceptionWords(outcome.code)}`, ms };
	return { name, ok: false, detail: outcome.kind === 'timeout' ? `no answer in ${ms} ms` : outcome.detail, ms };
}

class Poller implements SourceLink {
	readonly closed: Promise<void>;
	readonly #settings: ModbusSettings;
	readonly #context: SourceContext;
	readonly #link: ModbusLink;
	readonly #emit: Emit;
	readonly #signal: AbortSignal;
	readonly #breaker = new UnitBreaker();
	#items: (KeyedAddress & { intervalMs: number })[] = [];
	#rounds = new Map<number, Rounds>();
	#holes: KnownHole[] = [];
	#plans = new Map<string, ReadBlock[]>();
	#wake: () => void = () => undefined;
	readonly #underway = new Set<Promise<unknown>>();
	readonly #idle: (() => void)[] = [];
	#isReading = false;
	/** Most registers a read; less than the setting once the device has refused as many. */
	#most: number;
	#exceptionAdvice: Advice | null = null;
	/** The last answer, not handed on yet. */
	#answered: { block: ReadBlock; bytes: Uint8Array; receivedAt: number; ms: number } | null = null;

	constructor(settings: ModbusSettings, context: SourceContext, link: ModbusLink, emit: Emit, signal: AbortSignal) {
		this.#settings = settings;
		this.#most = settings.max_registers;
		this.#context = context;
		this.#link = link;
		this.#emit = emit;
		this.#signal = signal;
		signal.addEventListener('abort', () => this.#wake(), { once: true });
		this.closed = this.#run().finally(() => link.drop());
		this.closed.catch(() => undefined);
	}

	/** What is wrong while the connection stands. */
	get advice(): Advice | null {
		const silent = this.#breaker.silent();
		if (silent.length === 0) return this.#exceptionAdvice;
		const units = new Set(this.#items.map((item) => item.address.unitId));
		const others = [...units].filter((unit) => !silent.includes(unit)).length;
		if (others === 0) return silentAdvice(placeOf(this.#settings), silent, this.#settings.timeout_ms);
		const text = silent.length === 1 ? `Unit ${silent[0]} does not answer.` : `Units ${silent.join(', ')} do not answer.`;
		return {
			code: 'unit-silent',
			text,
			check: `The gateway itself answers and ${others} other ${others === 1 ? 'unit is' : 'units are'} well: check the unit’s supply and that its unit id is unchanged, then the cable to it.`,
		};
	}

	async setAddresses(wanted: readonly WantedAddress[]) {
		const results = wanted.map(({ key, address }) =>
			address.kind === 'modbus' ? { key, ok: true } : { key, ok: false, detail: `a ${address.kind} address on a Modbus source` },
		);
		this.#items = wanted.flatMap(({ key, address, intervalMs }) =>
			address.kind === 'modbus' ? [{ key, address, intervalMs }] : [],
		);
		// What was a gap may be wanted now.
		this.#holes = this.#holes.filter((hole) => !hole.isGap || !this.#items.some((item) => inHole(item.address, [hole])));
		const now = performance.now();
		const intervals = new Set(this.#items.map((item) => item.intervalMs));
		for (const interval of intervals) if (!this.#rounds.has(interval)) this.#rounds.set(interval, startRounds(interval, now));
		for (const interval of [...this.#rounds.keys()]) if (!intervals.has(interval)) this.#rounds.delete(interval);
		this.#plans.clear();
		this.#wake();
		return results;
	}

	/** Asks each mapped unit over the running socket, between two rounds. */
	async test(signal: AbortSignal): Promise<TestReport> {
		return this.#between(async () => {
			const steps: TestStep[] = [
				{
					name: 'Connection',
					ok: this.#link.isOpen,
					detail: this.#link.isOpen ? `${placeOf(this.#settings)} is open` : 'being made again',
				},
			];
			const units = [...new Set(this.#items.map((item) => item.address.unitId))].sort((a, b) => a - b);
			for (const unit of units.length > 0 ? units : [1]) {
				if (!this.#link.isOpen) await this.#link.connect().catch(() => undefined);
				const block = planReads(
					this.#items.filter((item) => item.address.unitId === unit && !inHole(item.address, this.#holes)),
					this.#holes,
					this.#settings.max_registers,
				)[0];
				if (!block) {
					steps.push(await testUnit(this.#link, unit, signal));
					continue;
				}
				const outcome = await this.#link.read(unit, block.table, block.start, block.count);
				const ms = Math.round(outcome.ms);
				const detail =
					outcome.kind === 'answer'
						? `${requestWords(unit, block.table, block.start, block.count)} answered in ${ms} ms`
						: outcome.kind === 'exception'
							? exceptionWords(outcome.code)
							: outcome.kind === 'timeout'
								? `no answer in ${ms} ms`
								: outcome.detail;
				steps.push({ name: `Unit ${unit}`, ok: outcome.kind === 'answer', detail, ms });
			}
			return { ok: steps.every((step) => step.ok), steps, advice: this.advice };
		});
	}

	/** Runs `work` while no round has the socket. */
	async #between<T>(work: () => Promise<T>): Promise<T> {
		while (this.#isReading) await new Promise<void>((resolve) => this.#idle.push(resolve));
		this.#isReading = true;
		try {
			return await work();
		} finally {
			this.#free();
		}
	}

	#free(): void {
		this.#isReading = false;
		this.#idle.shift()?.();
	}

	async #run(): Promise<void> {
		while (!this.#signal.aborted) {
			const now = performance.now();
			const due = [...this.#rounds.values()].filter((rounds) => rounds.nextAt <= now);
			if (due.length === 0) {
				const next = Math.min(...[...this.#rounds.values()].map((rounds) => rounds.nextAt), now + 1_000);
				await this.#sleep(next - now);
				continue;
			}
			const intervals = due.map((rounds) => rounds.intervalMs).sort((a, b) => a - b);
			await this.#between(() => this.#round(intervals));
			const after = performance.now();
			for (const rounds of due) {
				const moved = afterRound(rounds, after);
				if (this.#rounds.has(rounds.intervalMs)) this.#rounds.set(rounds.intervalMs, moved);
				if (moved.skipped > rounds.skipped && (rounds.skipped === 0 || moved.skipped % 100 < moved.skipped - rounds.skipped)) {
					this.#context.observer.event(
						'warning',
						'rounds-skipped',
						`${moved.skipped} rounds of ${rounds.intervalMs} ms were skipped: the device answers too slowly for what is asked`,
					);
				}
			}
		}
		await Promise.allSettled(this.#underway);
	}

	#sleep(ms: number): Promise<void> {
		// A timer takes a whole millisecond at least, which a device that is asked without a pause would notice.
		if (ms < 0.5) return new Promise((resolve) => setImmediate(resolve));
		return new Promise((resolve) => {
			const timer = setTimeout(done, Math.max(0, ms));
			function done() {
				clearTimeout(timer);
				resolve();
			}
			this.#wake = done;
			if (this.#signal.aborted) done();
		});
	}

	async #round(intervals: readonly number[]): Promise<void> {
		for (const block of this.#blocksOf(intervals)) {
			if (this.#signal.aborted) return;
			if (!this.#breaker.allows(block.unitId, performance.now())) continue;
			await this.#readBlock(block);
		}
		await this.#probeHoles(new Set(intervals));
		await this.#handAnswered();
	}

	/** Hands on the block that was answered last. */
	async #handAnswered(): Promise<void> {
		const answered = this.#answered;
		this.#answered = null;
		if (answered) await this.#hand(samplesOf(answered.block, answered.bytes, answered.receivedAt, answered.ms));
	}

	#blocksOf(intervals: readonly number[]): ReadBlock[] {
		const key = intervals.join(',');
		let plan = this.#plans.get(key);
		if (!plan) {
			const wanted = new Set(intervals);
			plan = planReads(
				this.#items.filter((item) => wanted.has(item.intervalMs) && !inHole(item.address, this.#holes)),
				this.#holes,
				this.#most,
			);
			this.#plans.set(key, plan);
		}
		return plan;
	}

	async #readBlock(block: ReadBlock): Promise<void> {
		if (!this.#link.isOpen) await this.#reconnect();
		if (this.#signal.aborted) return;
		const { observer } = this.#context;
		const reading = this.#link.read(block.unitId, block.table, block.start, block.count).then((outcome) => ({
			outcome,
			receivedAt: this.#context.now(),
		}));
		// The answer before this one is cut up while the device works on the next: its time is not ours to waste.
		await this.#handAnswered();
		const { outcome, receivedAt } = await reading;
		observer.request(outcome.kind === 'answer', outcome.ms);
		switch (outcome.kind) {
			case 'answer':
				if (this.#breaker.answered(block.unitId)) observer.event('note', 'unit-back', `unit ${block.unitId} answers again`);
				if (this.#holes.every((hole) => hole.isGap)) this.#exceptionAdvice = null;
				this.#answered = { block, bytes: outcome.bytes, receivedAt, ms: outcome.ms };
				return;
			case 'exception':
				await this.#refused(block, outcome.code, receivedAt);
				return;
			case 'timeout':
			case 'broken': {
				this.#exchangeFailed(
					block,
					receivedAt,
					outcome.kind === 'timeout'
						? `no answer in ${Math.round(outcome.ms)} ms; socket dropped`
						: `${outcome.detail}; socket dropped`,
				);
				if (outcome.kind === 'timeout' && this.#breaker.timedOut(block.unitId, performance.now())) {
					const others = new Set(this.#items.map((item) => item.address.unitId)).size - 1;
					observer.event('warning', 'unit-silent', unitAdvice(block.unitId, others));
				}
				await this.#hand(
					block.items.map(({ key }) => ({
						key,
						receivedAt,
						sourceAt: null,
						raw: null,
						sourceQuality: null,
						fault: { code: 'no-answer' as const },
					})),
				);
			}
		}
	}

	#exchangeFailed(block: ReadBlock, at: number, meaning: string): void {
		const { observer } = this.#context;
		observer.exchange({
			at,
			direction: 'out',
			bytes: requestBytes(block.unitId, block.table, block.start, block.count),
			meaning: requestWords(block.unitId, block.table, block.start, block.count),
			failed: false,
		});
		observer.exchange({ at, direction: 'none', bytes: '', meaning, failed: true });
	}

	/** A block refused: for an address that is not there it is parted until the one is found, so that a bad register spoils no neighbour. */
	async #refused(block: ReadBlock, code: number, receivedAt: number): Promise<void> {
		const { observer } = this.#context;
		observer.exchange({
			at: receivedAt,
			direction: 'out',
			bytes: requestBytes(block.unitId, block.table, block.start, block.count),
			meaning: requestWords(block.unitId, block.table, block.start, block.count),
			failed: false,
		});
		observer.exchange({ at: receivedAt, direction: 'in', ...exceptionExchange(block.unitId, block.table, code), failed: true });
		const isAddress = code === 2 || code === 3;
		const now = performance.now();
		if (code === 10 || code === 11) {
			// The gateway says what a time-out would: nobody is behind it.
			if (this.#breaker.timedOut(block.unitId, now)) {
				const others = new Set(this.#items.map((item) => item.address.unitId)).size - 1;
				observer.event('warning', 'unit-silent', unitAdvice(block.unitId, others));
			}
		} else {
			this.#breaker.answered(block.unitId);
			if (asksForPatience(code)) this.#breaker.pause(block.unitId, now, PATIENCE_MS);
		}
		if (isAddress && block.items.length > 1) {
			const middle = block.items.length >> 1;
			const halves = [block.items.slice(0, middle), block.items.slice(middle)];
			const known = this.#holes.length;
			for (const half of halves) {
				for (const part of planReads(half, this.#holes, this.#most)) {
					if (this.#signal.aborted) return;
					if (this.#breaker.allows(part.unitId, performance.now())) await this.#readBlock(part);
				}
			}
			// Every wanted register answered: what the device refuses lies between the halves, where nobody wanted anything.
			const from = Math.max(...(halves[0] ?? []).map(({ address }) => address.register + widthOf(address)));
			const to = Math.min(...(halves[1] ?? []).map(({ address }) => address.register));
			if (this.#holes.length === known && to > from && this.#link.isOpen) {
				this.#holes.push({
					unitId: block.unitId,
					table: block.table,
					from,
					to,
					probeAt: Number.POSITIVE_INFINITY,
					code,
					isGap: true,
				});
			}
			if (code === 3 && this.#holes.length === known && to <= from && this.#link.isOpen) {
				// Nothing lies between and both halves answered: the device gives fewer registers at once.
				this.#most = Math.max(1, Math.min(this.#most, Math.ceil(block.count / 2)));
				observer.event(
					'note',
					'fewer-registers',
					`the device refuses ${block.count} registers at once; reads ask for at most ${this.#most} from here on`,
				);
			}
			this.#plans.clear();
			return;
		}
		if (isAddress) {
			for (const { address } of block.items) {
				this.#holes = this.#holes.filter(
					(hole) => !(hole.unitId === address.unitId && hole.table === address.table && hole.from === address.register),
				);
				this.#holes.push({
					unitId: address.unitId,
					table: address.table,
					from: address.register,
					to: address.register + widthOf(address),
					probeAt: performance.now() + HOLE_PROBE_MS,
					code,
					isGap: false,
				});
				observer.event(
					'warning',
					`exception-${code}`,
					`${requestWords(address.unitId, address.table, address.register, widthOf(address))}: ${exceptionWords(code)}; asked again once a minute`,
				);
			}
			this.#plans.clear();
		}
		this.#exceptionAdvice = {
			code: `exception-${code}`,
			text: `${requestWords(block.unitId, block.table, block.start, block.count)}: ${exceptionWords(code)}.`,
			check: isAddress
				? 'Check the register number and table against the device’s own list; its firmware may have moved them.'
				: 'Check the device itself; if it is busy, ask less often or set a gap.',
		};
		await this.#hand(
			block.items.map(({ key }) => ({
				key,
				receivedAt,
				sourceAt: null,
				raw: null,
				sourceQuality: null,
				fault: { code: 'exception' as const, exception: code },
			})),
		);
	}

	/** Refused registers are asked again rarely, each alone; one that answers is a hole no more. */
	async #probeHoles(intervals: ReadonlySet<number>): Promise<void> {
		const now = performance.now();
		for (const hole of this.#holes.filter((one) => one.probeAt <= now)) {
			const items = this.#items.filter((item) => intervals.has(item.intervalMs) && inHole(item.address, [hole]));
			hole.probeAt = now + HOLE_PROBE_MS;
			for (const item of items) {
				if (this.#signal.aborted) return;
				if (!this.#breaker.allows(item.address.unitId, performance.now())) continue;
				if (!this.#link.isOpen) await this.#reconnect();
				const width = isBitTable(item.address.table) ? 1 : widthOf(item.address);
				const outcome = await this.#link.read(item.address.unitId, item.address.table, item.address.register, width);
				this.#context.observer.request(outcome.kind === 'answer', outcome.ms);
				if (outcome.kind === 'timeout') this.#breaker.timedOut(item.address.unitId, performance.now());
				if (outcome.kind === 'answer') {
					this.#holes = this.#holes.filter((one) => one !== hole);
					this.#exceptionAdvice = null;
					this.#plans.clear();
					this.#context.observer.event(
						'note',
						'address-back',
						`${requestWords(item.address.unitId, item.address.table, item.address.register, width)} answers again`,
					);
				} else if (outcome.kind === 'exception') {
					await this.#hand([
						{
							key: item.key,
							receivedAt: this.#context.now(),
							sourceAt: null,
							raw: null,
							sourceQuality: null,
							fault: { code: 'exception', exception: outcome.code },
						},
					]);
				}
			}
		}
	}

	/** A socket dropped after a time-out is made again at once; what cannot be made again is a lost connection. */
	async #reconnect(): Promise<void> {
		let last: unknown;
		for (let tries = 0; tries < RECONNECTS && !this.#signal.aborted; tries += 1) {
			try {
				await this.#link.connect();
				return;
			} catch (error) {
				last = error;
				await this.#sleep(200 * (tries + 1));
			}
		}
		if (this.#signal.aborted) return;
		throw new SourceError(connectAdvice(last as Error & { code?: string }, placeOf(this.#settings)), { cause: last });
	}

	/** Hands samples on without waiting for the commit, as long as not too much waits. */
	async #hand(samples: Sample[]): Promise<void> {
		const handed: Promise<unknown> = this.#emit(samples)
			.catch(() => undefined)
			.finally(() => this.#underway.delete(handed));
		this.#underway.add(handed);
		if (this.#underway.size >= MOST_UNDERWAY) await Promise.race(this.#underway);
	}
}

/** Where each address of a block lies in its answer: bits by number, registers by byte; worked out once a plan. */
const cuts = new WeakMap<ReadBlock, { from: number; to: number }[]>();

function cutsOf(block: ReadBlock): { from: number; to: number }[] {
	const known = cuts.get(block);
	if (known) return known;
	const made = block.items.map(({ address }) => {
		const offset = address.register - block.start;
		return isBitTable(block.table) ? { from: offset, to: offset + 1 } : { from: offset * 2, to: (offset + widthOf(address)) * 2 };
	});
	cuts.set(block, made);
	return made;
}

/** Cuts a block's answer into its addresses' own bytes. */
function samplesOf(block: ReadBlock, bytes: Uint8Array, receivedAt: number, latencyMs: number): Sample[] {
	const isBits = isBitTable(block.table);
	const places = cutsOf(block);
	return block.items.map(({ key }, index) => {
		const { from, to } = places[index] ?? { from: 0, to: 0 };
		return {
			key,
			receivedAt,
			sourceAt: null,
			raw: isBits
				? { kind: 'bit', value: (((bytes[from >> 3] ?? 0) >> (from & 7)) & 1) === 1 }
				: { kind: 'registers', bytes: new Uint8Array(bytes.buffer, bytes.byteOffset + from, to - from) },
			sourceQuality: null,
			fault: null,
			latencyMs,
		};
	});
}
