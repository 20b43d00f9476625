// Interface. May touch: the browser's timer.
import { createSubscriber } from 'svelte/reactivity';

let current = Date.now();

const subscribe = createSubscriber((update) => {
	const timer = setInterval(() => {
		current = Date.now();
		update();
	}, 1_000);
	return () => clearInterval(timer);
});

/** One ticking second for every age on the page; runs only while something reads it. */
export const clock = {
	/** Milliseconds since the epoch. */
	get now(): number {
		subscribe();
		return Math.max(current, Date.now() - 1_000);
	},
};
