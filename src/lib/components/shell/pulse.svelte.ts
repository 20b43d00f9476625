// Interface. May touch: the site's event stream of pulses.

/** What the hub's heartbeat says, once a second. */
export interface Pulse {
	at: number;
	readings_per_s: number;
	sources_up: number;
	sources_total: number;
	tags: number;
	tags_stale: number;
	danger: number;
	alert: number;
	unacknowledged: number;
	/** Seconds that the slowest feed reader is behind; null when nobody reads. */
	slowest_lag_s: number | null;
	slowest_reader: string | null;
	/** False when no collector's heartbeat is younger than 10 s. */
	collector_alive: boolean;
	/** Readings that wait on a collector's disk, and for how long the oldest has; 0 when all is in the database. */
	spooled: number;
	spooled_for_s: number;
	/** Rises when anything in the overview changed. */
	change: string;
	/** Rates of the last minute, in the first beat only. */
	trace?: number[];
}

const TRACE_LENGTH = 49;

/** Follows the pulse while the page is looked at; knows when it lost touch. */
export class PulseFeed {
	now = $state<Pulse | null>(null);
	/** Readings per second of the last 49 s, oldest first. */
	trace = $state<(number | null)[]>([]);
	/** Milliseconds by which this browser's clock is ahead of the host's. */
	skewMs = $state(0);
	lostSince = $state<number | null>(null);

	readonly #site: string;
	#stream: EventSource | null = null;
	#watch: ReturnType<typeof setInterval> | null = null;
	#heardAt = Date.now();

	constructor(site: string) {
		this.#site = site;
	}

	start(): () => void {
		this.#open();
		this.#watch = setInterval(() => {
			const silence = Date.now() - this.#heardAt;
			if (silence > 5_000 && !document.hidden && this.lostSince === null) this.lostSince = this.#heardAt;
			// A stream that was refused outright does not come back by itself.
			if (this.#stream?.readyState === EventSource.CLOSED && !document.hidden) this.#open();
		}, 2_000);
		document.addEventListener('visibilitychange', this.#onVisibility);
		return () => {
			if (this.#watch) clearInterval(this.#watch);
			document.removeEventListener('visibilitychange', this.#onVisibility);
			this.#stream?.close();
		};
	}

	readonly #onVisibility = () => {
		if (document.hidden) {
			this.#stream?.close();
			this.#stream = null;
		} else {
			this.#heardAt = Date.now();
			this.#open();
		}
	};

	#open(): void {
		this.#stream?.close();
		const stream = new EventSource(`/${this.#site}/pulse`);
		this.#stream = stream;
		stream.addEventListener('pulse', (event) => {
			const pulse = JSON.parse((event as MessageEvent<string>).data) as Pulse;
			this.#heardAt = Date.now();
			this.lostSince = null;
			this.skewMs = Date.now() - pulse.at;
			this.now = pulse;
			this.trace = (pulse.trace ?? [...this.trace, pulse.readings_per_s]).slice(-TRACE_LENGTH);
		});
	}
}
