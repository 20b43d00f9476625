// Edge: cli. May touch: the product's API. A reader of the feed that goes on from its cursor whatever dies, and knows what it has seen.
import type { SoakApi } from './run-soak.ts';

interface Page {
	items: { kind: string; tag: string; value: number | null }[];
	cursor: string;
}

export class FeedCount {
	/** Different samples. */
	different = 0;
	/** Samples that came again. */
	twice = 0;
	readonly #seen = new Map<string, Uint8Array>();
	readonly #api: SoakApi;
	#isStopped = false;
	readonly #reading: Promise<void>;

	constructor(api: SoakApi) {
		this.#api = api;
		this.#reading = this.#read();
	}

	async #read(): Promise<void> {
		let cursor = '0';
		while (!this.#isStopped) {
			try {
				const page = await this.#api.ask<Page>(`/feed?after=${cursor}&wait=2&limit=10000`);
				for (const item of page.items) if (item.kind === 'reading' && item.value !== null) this.#note(item.tag, item.value);
				({ cursor } = page);
			} catch {
				// The web process or its database is away: the cursor is kept, and the same page asked for again.
				await new Promise((resolve) => setTimeout(resolve, 300));
			}
		}
	}

	#note(tag: string, serial: number): void {
		let seen = this.#seen.get(tag) ?? new Uint8Array(1_024);
		if (serial >= seen.length) {
			const grown = new Uint8Array(Math.max(seen.length * 2, serial + 1));
			grown.set(seen);
			seen = grown;
		}
		if (seen[serial]) this.twice += 1;
		else this.different += 1;
		seen[serial] = 1;
		this.#seen.set(tag, seen);
	}

	async stop(): Promise<void> {
		this.#isStopped = true;
		await this.#reading;
	}
}
