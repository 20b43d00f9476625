// Edge: server. May touch: process signals.
const stopping = new AbortController();

/** Aborts as soon as this process is told to stop: long answers end then, so that the server can close. */
export const shutdownSignal: AbortSignal = stopping.signal;

const acts: (() => Promise<void>)[] = [];

/** Adds to what is done once every connection has closed; the last added is done first, so that what was opened on top of something closes before it. */
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
		void closeAll();
	});
}

/** Does what was added, once. One act that fails must not keep the ones after it, the pool above all, from closing. */
export async function closeAll(): Promise<void> {
	for (let act = acts.pop(); act; act = acts.pop()) await act().catch(() => undefined);
}
