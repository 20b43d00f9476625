// Edge: sources. May touch: modbus-serial through link.ts. Not: database, tag map, scaling.
import type { ModbusSettings } from '#lib/domain/source-settings.ts';
import type { Advice, Emit, Source, SourceContext, SourceLink, TestReport, TestStep, WantedAddress } from '../source.ts';
import { SourceError } from '../source.ts';
import { connectAdvice } from './advice.ts';
import { BlockReader } from './block-reader.ts';
import { ModbusLink, placeOf } from './link.ts';
import { ReadPlanner } from './read-planner.ts';
import { afterRound, startRounds, type Rounds } from './schedule.ts';
import { testBlock, testDevice, testUnit } from './test-device.ts';

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
		test: (signal) => testDevice(settings, signal),
	};
}

/** Whose turn the socket is: rounds when they are due, a test between two of them. */
class Poller implements SourceLink {
	readonly closed: Promise<void>;
	readonly #settings: ModbusSettings;
	readonly #context: SourceContext;
	readonly #link: ModbusLink;
	readonly #planner: ReadPlanner;
	readonly #reader: BlockReader;
	readonly #signal: AbortSignal;
	#rounds = new Map<number, Rounds>();
	#wake: () => void = () => undefined;
	readonly #idle: (() => void)[] = [];
	#isReading = false;

	constructor(settings: ModbusSettings, context: SourceContext, link: ModbusLink, emit: Emit, signal: AbortSignal) {
		this.#settings = settings;
		this.#context = context;
		this.#link = link;
		this.#signal = signal;
		this.#planner = new ReadPlanner(settings.max_registers);
		const sleep = (ms: number) => this.#sleep(ms);
		this.#reader = new BlockReader({ settings, context, link, planner: this.#planner, emit, signal, sleep });
		signal.addEventListener('abort', () => this.#wake(), { once: true });
		this.closed = this.#run().finally(() => link.drop());
		this.closed.catch(() => undefined);
	}

	/** What is wrong while the connection stands. */
	get advice(): Advice | null {
		return this.#reader.advice;
	}

	async setAddresses(wanted: readonly WantedAddress[]) {
		const results = wanted.map(({ key, address }) =>
			address.kind === 'modbus' ? { key, ok: true } : { key, ok: false, detail: `a ${address.kind} address on a Modbus source` },
		);
		const items = wanted.flatMap(({ key, address, intervalMs }) =>
			address.kind === 'modbus' ? [{ key, address, intervalMs }] : [],
		);
		this.#planner.want(items);
		const now = performance.now();
		const intervals = new Set(items.map((item) => item.intervalMs));
		for (const interval of intervals) if (!this.#rounds.has(interval)) this.#rounds.set(interval, startRounds(interval, now));
		for (const interval of [...this.#rounds.keys()]) if (!intervals.has(interval)) this.#rounds.delete(interval);
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
			const { units } = this.#planner;
			for (const unit of units.length > 0 ? units : [1]) {
				if (!this.#link.isOpen) await this.#link.connect().catch(() => undefined);
				const block = this.#planner.firstBlockOf(unit);
				steps.push(block ? await testBlock(this.#link, block) : await testUnit(this.#link, unit, signal));
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
			await this.#between(() => this.#reader.round(intervals));
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
		await this.#reader.settled();
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
}
