// Edge: server. May touch: process signals.
const stopping = new AbortController();

/** Aborts as soon as this process is told to stop: long answers end then, so that the server can close. */
export const shutdownSignal: AbortSignal = stopping.signal;

const acts: (() => Promise<void>)[] = [];

/** Adds to what is done once every connection has closed; done in the order of adding. */
export function onShutdown(act: () => Promise<void>): void {
	acts.push(act);
}

let isArmed = false;

/** Listens for the stop of the web process; a second call does nothing. */
export function armShutdown(): void {
	if (isArmed) return;
	isArmed = true;
	const stop = () => stopping.abort();
	process.once('SIGTERM', stop);
	process.once('SIGINT', stop);
	process.once('sveltekit:shutdown', () => {
		stop();
		void runActs();
	});
}

/** One act that fails must not keep the ones after it, the pool above all, from closing. */
async function runActs(): Promise<void> {
	for (const act of acts) await act().catch(() => undefined);
}
