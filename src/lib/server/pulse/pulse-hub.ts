// Edge: pulse. May touch: web pool, select only; timers.
import { webPool } from '#lib/server/db/database.ts';
import { log } from '#lib/server/log.ts';
import { shutdownSignal } from '#lib/server/shutdown.ts';
import { readPulse, type PulseRow } from './read-pulse.ts';

/** A beat as the page gets it: the running sum has become a rate. */
export type Beat = Omit<PulseRow, 'taken'> & {
	readings_per_s: number;
	/** The rates before it, oldest first; only in the first beat that a page gets. */
	trace?: number[];
};
type Listener = (beat: Beat) => void;

interface SiteHub {
	listeners: Map<Listener, () => void>;
	timer: NodeJS.Timeout;
	/** Running sums of the last 10 s, oldest first. */
	sums: { at: number; taken: number }[];
	isReading: boolean;
	last: Beat | null;
	/** Rates of the last minute, oldest first. */
	rates: number[];
	/** When the last page went; null while one looks. */
	idleSince: number | null;
}

const PERIOD_MS = 1_000;
/** A source's counters are written every few seconds; a rate over less than this would jump between nothing and double. */
const RATE_OVER_MS = 10_000;
/** Nobody looked for this long: the asking ends. */
const IDLE_MS = 30_000;
const RATES_KEPT = 60;
const hubs = new Map<number, SiteHub>();

/**
 * Calls `listener` with every beat of a site until the answer is called. However many pages look, the database is asked once a second per site.
 * `ended` is called when the process stops, so that an open stream does not hold it up.
 */
export function followPulse(siteId: number, listener: Listener, ended: () => void): () => void {
	const known = hubs.get(siteId);
	const hub: SiteHub = known ?? {
		listeners: new Map(),
		timer: setInterval(() => void beat(siteId), PERIOD_MS),
		sums: [],
		isReading: false,
		last: null,
		rates: [],
		idleSince: null,
	};
	if (!known) {
		hubs.set(siteId, hub);
		void beat(siteId);
	}
	hub.idleSince = null;
	if (hub.last) listener({ ...hub.last, trace: hub.rates });
	hub.listeners.set(listener, ended);
	return () => {
		// A page that is only loaded anew finds the last minute again.
		if (hub.listeners.delete(listener) && hub.listeners.size === 0) hub.idleSince = Date.now();
	};
}

async function beat(siteId: number): Promise<void> {
	const hub = hubs.get(siteId);
	if (!hub || hub.isReading) return;
	if (hub.idleSince !== null && Date.now() - hub.idleSince > IDLE_MS) {
		clearInterval(hub.timer);
		hubs.delete(siteId);
		return;
	}
	hub.isReading = true;
	try {
		const { taken, ...row } = await readPulse(webPool(), siteId);
		hub.sums.push({ at: row.at, taken });
		hub.sums = hub.sums.filter((sum) => sum.at >= row.at - RATE_OVER_MS);
		const first = hub.sums[0];
		const seconds = first ? (row.at - first.at) / 1_000 : 0;
		const rate = first && seconds > 0 ? Math.max(0, taken - first.taken) / seconds : 0;
		hub.last = { ...row, readings_per_s: Math.round(rate * 10) / 10 };
		hub.rates = [...hub.rates, hub.last.readings_per_s].slice(-RATES_KEPT);
		for (const listener of hub.listeners.keys()) listener(hub.last);
	} catch (error) {
		// The page notices the silence by itself and says so.
		if (!shutdownSignal.aborted) log.warn({ error: (error as Error).message, siteId }, 'the pulse could not be read');
	} finally {
		hub.isReading = false;
	}
}

/** Ends every open pulse; a stop waits for open answers otherwise. */
function closePulses(): void {
	for (const hub of hubs.values()) {
		clearInterval(hub.timer);
		for (const ended of hub.listeners.values()) ended();
	}
	hubs.clear();
}

shutdownSignal.addEventListener('abort', closePulses);
