// Tests. A device that does what a test tells it: hands samples on, loses its link, refuses to connect, and records what it was asked for.
import {
	SourceError,
	type Emit,
	type EmitAnswer,
	type Sample,
	type Source,
	type SourceLink,
	type WantedAddress,
} from '#lib/pipeline/sources/source.ts';

/** A value as an OPC UA server would hand it over: a Double, with the device's own time unless `sourceAt` is null. */
export function sampleOf(key: number, value: number, sourceAt: number | null = Date.now(), extra: Partial<Sample> = {}): Sample {
	return {
		key,
		receivedAt: Date.now(),
		sourceAt,
		raw: { kind: 'variant', dataType: 'Double', value },
		sourceQuality: 0,
		fault: null,
		...extra,
	};
}

export class ScriptedDevice {
	/** How often a link was made, and how many stand now. */
	opens = 0;
	standing = 0;
	/** What each `setAddresses` asked for, in order. */
	readonly asked: WantedAddress[][] = [];
	#isRefusing = false;
	#emit: Emit | null = null;
	#lose: ((error: Error) => void) | null = null;
	readonly #underway = new Set<Promise<EmitAnswer>>();

	/** The source that a collector makes for this device; each `open` is a new link to it. */
	source(): Source {
		return {
			open: (emit, signal) => this.#open(emit, signal),
			test: () => Promise.resolve({ ok: true, steps: [], advice: null }),
		};
	}

	get isConnected(): boolean {
		return this.#emit !== null;
	}

	#open(emit: Emit, signal: AbortSignal): Promise<SourceLink> {
		if (this.#isRefusing) return Promise.reject(lost());
		this.opens += 1;
		this.standing += 1;
		this.#emit = emit;
		const closed = new Promise<void>((resolve, reject) => {
			let hasEnded = false;
			const end = () => {
				if (hasEnded) return;
				hasEnded = true;
				this.standing -= 1;
				if (this.#emit === emit) this.#emit = null;
			};
			this.#lose = (error) => {
				end();
				reject(error);
			};
			signal.addEventListener('abort', () => {
				end();
				void Promise.allSettled(this.#underway).then(() => resolve());
			});
		});
		closed.catch(() => undefined);
		return Promise.resolve({
			closed,
			setAddresses: (wanted) => {
				this.asked.push([...wanted]);
				return Promise.resolve(wanted.map(({ key }) => ({ key, ok: true })));
			},
		});
	}

	/** Hands samples on; resolves with the pipeline's answer. Throws without a link. */
	send(...samples: Sample[]): Promise<EmitAnswer> {
		if (!this.#emit) throw new Error('the scripted device has no link');
		const answer = this.#emit(samples);
		this.#underway.add(answer);
		void answer.finally(() => this.#underway.delete(answer));
		return answer;
	}

	/** The link breaks, and stays broken until `recover`. */
	lose(): void {
		this.#isRefusing = true;
		this.#lose?.(lost());
		this.#lose = null;
	}

	recover(): void {
		this.#isRefusing = false;
	}
}

function lost(): SourceError {
	return new SourceError({ code: 'no-connection', text: 'The device does not answer.', check: 'Check its power and cable.' });
}
