// Edge: sources. May touch: modbus-serial through link.ts. One read after another: what came of each, and what is learnt from it.
import type { ModbusSettings } from '#lib/domain/source-settings.ts';
import { SourceError, type Advice, type Emit, type Sample, type SourceContext } from '../source.ts';
import { connectAdvice, silentAdvice, unitAdvice } from './advice.ts';
import { asksForPatience, exceptionWords } from './exception-code.ts';
import { exceptionExchange, requestBytes, requestWords } from './frame.ts';
import { placeOf, type ModbusLink } from './link.ts';
import type { ReadBlock } from './read-plan.ts';
import { halvesOf, type ReadPlanner } from './read-planner.ts';
import { faultsOf, samplesOf } from './samples.ts';
import { UnitBreaker } from './unit-breaker.ts';

/** Batches handed on and not yet taken; then polling waits, which is the back-pressure. */
const MOST_UNDERWAY = 8;
/** A connection that cannot be made again this often in a row is lost. */
const RECONNECTS = 3;
/** A unit that is busy is left alone this long. */
const PATIENCE_MS = 1_000;

/** What a reader works with; `sleep` ends early when the source stops. */
export interface ReaderParts {
	settings: ModbusSettings;
	context: SourceContext;
	link: ModbusLink;
	planner: ReadPlanner;
	emit: Emit;
	signal: AbortSignal;
	sleep(ms: number): Promise<void>;
}

/** Reads blocks: silent units are asked rarely, refused registers are found and asked once a minute, a dropped socket is made again. */
export class BlockReader {
	readonly #parts: ReaderParts;
	readonly #breaker = new UnitBreaker();
	readonly #underway = new Set<Promise<unknown>>();
	/** Units whose newest answer is an exception that is not about an address. */
	readonly #failing = new Map<number, Advice>();
	/** The last answer, not handed on yet. */
	#answered: { block: ReadBlock; bytes: Uint8Array; receivedAt: number; ms: number } | null = null;

	constructor(parts: ReaderParts) {
		this.#parts = parts;
	}

	/** What is wrong while the connection stands. */
	get advice(): Advice | null {
		const { planner, settings } = this.#parts;
		const silent = this.#breaker.silent();
		if (silent.length === 0) {
			const refused = planner.newestRefused;
			if (!refused) return [...this.#failing].findLast(([unit]) => planner.units.includes(unit))?.[1] ?? null;
			return {
				code: `exception-${refused.code}`,
				text: `${requestWords(refused.unitId, refused.table, refused.from, refused.to - refused.from)}: ${exceptionWords(refused.code)}.`,
				check: 'Check the register number and table against the device’s own list; its firmware may have moved them.',
			};
		}
		const others = planner.units.filter((unit) => !silent.includes(unit)).length;
		if (others === 0) return silentAdvice(placeOf(settings), silent, settings.timeout_ms);
		const text = silent.length === 1 ? `Unit ${silent[0]} does not answer.` : `Units ${silent.join(', ')} do not answer.`;
		return {
			code: 'unit-silent',
			text,
			check: `The gateway itself answers and ${others} other ${others === 1 ? 'unit is' : 'units are'} well: check the unit’s supply and that its unit id is unchanged, then the cable to it.`,
		};
	}

	/** Resolves once everything taken is handed over. */
	async settled(): Promise<void> {
		await Promise.allSettled(this.#underway);
	}

	/** One round: the planned reads, then refused registers that are due. */
	async round(intervals: readonly number[]): Promise<void> {
		try {
			for (const block of this.#parts.planner.blocksOf(intervals)) await this.#readIfAllowed(block);
			await this.#probe(intervals);
		} finally {
			// A connection that is lost, or a stop, takes no answer with it.
			await this.#handAnswered();
		}
	}

	async #probe(intervals: readonly number[]): Promise<void> {
		const { planner, context } = this.#parts;
		for (const { hole, blocks } of planner.probesOf(intervals, performance.now())) {
			for (const block of blocks) {
				if (!this.#isAllowed(block)) continue;
				planner.probed(hole, performance.now());
				if (!(await this.#read(block))) continue;
				planner.answered(block);
				const words = requestWords(block.unitId, block.table, block.start, block.count);
				context.observer.event('note', 'address-back', `${words} answers again`);
			}
		}
	}

	#isAllowed(block: ReadBlock): boolean {
		return !this.#parts.signal.aborted && this.#breaker.allows(block.unitId, performance.now());
	}

	async #readIfAllowed(block: ReadBlock): Promise<boolean> {
		return this.#isAllowed(block) && (await this.#read(block));
	}

	/** Reads a block and sees that what came of it is handed on. True when the device gave all of it at once. */
	async #read(block: ReadBlock): Promise<boolean> {
		const { link, signal, context } = this.#parts;
		if (!link.isOpen) await this.#reconnect();
		if (signal.aborted) return false;
		const reading = link
			.read(block.unitId, block.table, block.start, block.count)
			.then((outcome) => ({ outcome, receivedAt: context.now() }));
		// The answer before this one is cut up while the device works on the next: its time is not ours to waste.
		await this.#handAnswered();
		const { outcome, receivedAt } = await reading;
		context.observer.request(outcome.kind === 'answer', outcome.ms);
		switch (outcome.kind) {
			case 'answer':
				this.#unitAnswered(block.unitId);
				this.#failing.delete(block.unitId);
				this.#answered = { block, bytes: outcome.bytes, receivedAt, ms: outcome.ms };
				return true;
			case 'exception':
				await this.#refused(block, outcome.code, receivedAt);
				return false;
			case 'timeout':
			case 'broken': {
				const what = outcome.kind === 'timeout' ? `no answer in ${Math.round(outcome.ms)} ms` : outcome.detail;
				this.#logRequest(block, receivedAt);
				context.observer.exchange({
					at: receivedAt,
					direction: 'none',
					bytes: '',
					meaning: `${what}; socket dropped`,
					failed: true,
				});
				if (outcome.kind === 'timeout') this.#unitSilent(block.unitId);
				await this.#hand(faultsOf(block, { code: 'no-answer' }, receivedAt));
				return false;
			}
		}
	}

	#logRequest({ unitId, table, start, count }: ReadBlock, at: number): void {
		this.#parts.context.observer.exchange({
			at,
			direction: 'out',
			bytes: requestBytes(unitId, table, start, count),
			meaning: requestWords(unitId, table, start, count),
			failed: false,
		});
	}

	#unitAnswered(unitId: number): void {
		if (this.#breaker.answered(unitId)) this.#parts.context.observer.event('note', 'unit-back', `unit ${unitId} answers again`);
	}

	#unitSilent(unitId: number): void {
		if (!this.#breaker.timedOut(unitId, performance.now())) return;
		this.#parts.context.observer.event('warning', 'unit-silent', unitAdvice(unitId, this.#parts.planner.units.length - 1));
	}

	/** A block refused: for an address that is not there it is parted until the one is found, so that a bad register spoils no neighbour. */
	async #refused(block: ReadBlock, code: number, receivedAt: number): Promise<void> {
		const { context, planner } = this.#parts;
		const { unitId, table, start, count, items } = block;
		this.#logRequest(block, receivedAt);
		context.observer.exchange({ at: receivedAt, direction: 'in', ...exceptionExchange(unitId, table, code), failed: true });
		if (code === 10 || code === 11) {
			// The gateway says what a time-out would: nobody is behind it.
			this.#unitSilent(unitId);
		} else {
			this.#unitAnswered(unitId);
			if (asksForPatience(code)) this.#breaker.pause(unitId, performance.now(), PATIENCE_MS);
		}
		const isAddress = code === 2 || code === 3;
		if (isAddress && items.length > 1) {
			await this.#part(block, code);
			return;
		}
		const words = `${requestWords(unitId, table, start, count)}: ${exceptionWords(code)}`;
		if (isAddress) {
			for (const item of items)
				if (planner.refused(item, code, performance.now()))
					context.observer.event('warning', `exception-${code}`, `${words}; asked again once a minute`);
		} else {
			this.#failing.delete(unitId);
			this.#failing.set(unitId, {
				code: `exception-${code}`,
				text: `${words}.`,
				check: 'Check the device itself; if it is busy, ask less often or set a gap.',
			});
		}
		await this.#hand(faultsOf(block, { code: 'exception', exception: code }, receivedAt));
	}

	async #part(block: ReadBlock, code: number): Promise<void> {
		const { planner, context } = this.#parts;
		// Only halves that answered whole tell where the refused register lies: one that timed out or was not asked tells nothing.
		let didAllAnswer = true;
		for (const half of halvesOf(block))
			for (const part of planner.partsOf(half)) if (!(await this.#readIfAllowed(part))) didAllAnswer = false;
		if (!didAllAnswer) return;
		const most = planner.halvesAnswered(block, code);
		if (most !== null)
			context.observer.event(
				'note',
				'fewer-registers',
				`the device refuses ${block.count} registers at once; reads ask for at most ${most} from here on`,
			);
	}

	/** A socket dropped after a time-out is made again at once; what cannot be made again is a lost connection. */
	async #reconnect(): Promise<void> {
		const { link, settings, signal, sleep } = this.#parts;
		let last: unknown;
		for (let tries = 0; tries < RECONNECTS && !signal.aborted; tries += 1) {
			try {
				await link.connect();
				return;
			} catch (error) {
				last = error;
				await sleep(200 * (tries + 1));
			}
		}
		if (signal.aborted) return;
		throw new SourceError(connectAdvice(last as Error & { code?: string }, placeOf(settings)), { cause: last });
	}

	async #handAnswered(): Promise<void> {
		const answered = this.#answered;
		this.#answered = null;
		if (answered) await this.#hand(samplesOf(answered.block, answered.bytes, answered.receivedAt, answered.ms));
	}

	/** Hands samples on without waiting for the commit, as long as not too much waits. */
	async #hand(samples: Sample[]): Promise<void> {
		const handed: Promise<unknown> = this.#parts
			.emit(samples)
			.catch(() => undefined)
			.finally(() => this.#underway.delete(handed));
		this.#underway.add(handed);
		if (this.#underway.size >= MOST_UNDERWAY) await Promise.race(this.#underway);
	}
}
