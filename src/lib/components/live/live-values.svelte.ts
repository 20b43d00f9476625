// Interface. May touch: the API's event stream, svelte-query's cache.
import { SvelteMap } from 'svelte/reactivity';
import { callAll, callApi } from './call-api.ts';
import type { LatestJson } from './shapes.ts';

/** The newest value of each tag of a site, kept up to date by the event stream while the page is looked at. */
export class LiveValues {
	readonly byTag = new SvelteMap<string, LatestJson>();
	/** False until the first answer came. */
	isLoaded = $state(false);
	/** True when the stream is open. */
	isLive = $state(false);
	problem = $state<string | null>(null);

	readonly #site: string;
	readonly #tags: readonly string[] | null;
	#stream: EventSource | null = null;
	#timer: ReturnType<typeof setInterval> | null = null;
	#stopped = false;
	#pending: (LatestJson & { tag: string })[] = [];
	#frame: ReturnType<typeof setTimeout> | null = null;

	/** `tags` null follows every tag of the site. */
	constructor(site: string, tags: readonly string[] | null = null) {
		this.#site = site;
		this.#tags = tags;
	}

	get(tag: string): LatestJson | undefined {
		return this.byTag.get(tag);
	}

	/** Reads the latest values and then follows the stream from the cursor taken before that read, so that nothing is missed. Answers how to stop. */
	start(): () => void {
		void this.#read();
		// Verdicts and staleness are judged on the server and are not in the stream's readings.
		this.#timer = setInterval(() => void this.#readAgain(), 5_000);
		document.addEventListener('visibilitychange', this.#onVisibility);
		return () => {
			this.#stopped = true;
			if (this.#timer) clearInterval(this.#timer);
			if (this.#frame) clearTimeout(this.#frame);
			document.removeEventListener('visibilitychange', this.#onVisibility);
			this.#close();
		};
	}

	readonly #onVisibility = () => {
		// A browser allows six connections to a server: a hidden tab gives its own back.
		if (document.hidden) this.#close();
		else void this.#read();
	};

	#close(): void {
		this.#stream?.close();
		this.#stream = null;
		this.isLive = false;
	}

	#query(): string {
		return this.#tags === null ? '' : `tags=${this.#tags.map(encodeURIComponent).join(',')}`;
	}

	async #read(): Promise<void> {
		if (this.#tags?.length === 0) {
			this.isLoaded = true;
			return;
		}
		try {
			const first = await callApi<{ items: LatestJson[]; cursor: string; next: string | null }>(
				this.#site,
				`/latest?${this.#query()}`,
			);
			if (this.#stopped) return;
			for (const item of first.items) this.byTag.set(item.tag, item);
			if (first.next) {
				const rest = await callAll<LatestJson>(this.#site, `/latest?after=${encodeURIComponent(first.next)}`);
				for (const item of rest) this.byTag.set(item.tag, item);
			}
			this.isLoaded = true;
			this.problem = null;
			if (!this.#stopped && !document.hidden) this.#follow(first.cursor);
		} catch (error) {
			this.problem = error instanceof Error ? error.message : String(error);
			if (!this.#stopped) setTimeout(() => !this.#stopped && void this.#read(), 3_000);
		}
	}

	async #readAgain(): Promise<void> {
		if (document.hidden || !this.isLoaded || this.#tags?.length === 0) return;
		try {
			const items = await callAll<LatestJson>(this.#site, `/latest?${this.#query()}`);
			for (const item of items) {
				const known = this.byTag.get(item.tag);
				if (!known || JSON.stringify(known) !== JSON.stringify(item)) this.byTag.set(item.tag, item);
			}
			this.problem = null;
		} catch (error) {
			// Values stay, with their ages growing.
			this.problem = error instanceof Error ? error.message : String(error);
		}
	}

	#follow(cursor: string): void {
		this.#close();
		const query = [`after=${encodeURIComponent(cursor)}`, this.#query()].filter(Boolean).join('&');
		const stream = new EventSource(`/api/v1/sites/${this.#site}/stream?${query}`);
		this.#stream = stream;
		stream.onopen = () => (this.isLive = true);
		stream.onerror = () => (this.isLive = false);
		stream.addEventListener('gone', () => {
			this.#close();
			void this.#read();
		});
		stream.addEventListener('readings', (event) => {
			const { items } = JSON.parse((event as MessageEvent<string>).data) as { items: (LatestJson & { kind: string })[] };
			this.#pending.push(...items.filter((item) => item.kind === 'reading'));
			// A burst is drawn once.
			this.#frame ??= setTimeout(() => this.#apply(), 120);
		});
	}

	#apply(): void {
		this.#frame = null;
		const items = this.#pending;
		this.#pending = [];
		for (const item of items) {
			const known = this.byTag.get(item.tag);
			// The feed holds late readings too; the newest by time stays, and a bad one keeps the last value for the eye.
			if (!known || (known.test && !item.test) || Date.parse(item.at ?? '') < Date.parse(known.at ?? '')) continue;
			this.byTag.set(item.tag, {
				...known,
				at: item.at,
				received_at: item.received_at ?? new Date().toISOString(),
				value: item.value ?? known.value,
				quality: item.quality,
				stale: item.value === null ? known.stale : false,
				test: item.test ?? false,
			});
		}
	}
}
