// Edge: sources. May touch: nothing but the emit it is given. Samples on their way to the pipeline.
import type { Emit, Sample } from '../source.ts';

/** Batches handed on and not yet taken; beyond this they are joined. */
const MOST_UNDERWAY = 16;

/** Hands samples on in batches, without waiting for the commit as long as not too much waits. */
export class Outgoing {
	readonly #emit: Emit;
	readonly #underway = new Set<Promise<unknown>>();
	#waiting: Sample[] = [];
	#isFlushing = false;

	constructor(emit: Emit) {
		this.#emit = emit;
	}

	/** Samples of one notification go on together. */
	hand(sample: Sample): void {
		this.#waiting.push(sample);
		if (this.#isFlushing) return;
		this.#isFlushing = true;
		setImmediate(() => this.flush());
	}

	/** Hands on what waits, unless too much is underway. */
	flush(): void {
		this.#isFlushing = false;
		if (this.#waiting.length === 0) return;
		if (this.#underway.size >= MOST_UNDERWAY) {
			this.#isFlushing = true;
			void Promise.race(this.#underway).then(() => this.flush());
			return;
		}
		const batch = this.#waiting;
		this.#waiting = [];
		const handed: Promise<unknown> = this.#emit(batch)
			.catch(() => undefined)
			.finally(() => this.#underway.delete(handed));
		this.#underway.add(handed);
	}

	/** Resolves once everything taken is handed over. */
	async settled(): Promise<void> {
		while (this.#waiting.length > 0 || this.#underway.size > 0) {
			this.flush();
			await Promise.allSettled(this.#underway);
		}
	}
}
