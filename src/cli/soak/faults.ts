// Edge: cli. May touch: processes of a throwaway product, its broker and line. What can go wrong, on purpose; each is over when its promise resolves.
import { readdirSync, readFileSync } from 'node:fs';
import type { ThrowawayProduct } from '../throwaway-product.ts';
import type { FaultProxy } from './fault-proxy.ts';
import type { SoakApi } from './run-soak.ts';

export interface Rig {
	product: ThrowawayProduct;
	proxy: FaultProxy;
	broker: { restart(): Promise<void> };
	api: SoakApi;
	/** Process ids by name, as they are now. */
	pids(): Record<string, number>;
}

interface Fault {
	title: string;
	/** `seconds`: how long a fault that lasts does so. */
	strike(rig: Rig, seconds: number): Promise<void>;
}

const pause = (seconds: number) => new Promise((resolve) => setTimeout(resolve, seconds * 1_000));

function kill(rig: Rig, name: string, signal: NodeJS.Signals = 'SIGKILL'): void {
	const pid = rig.pids()[name];
	if (pid) process.kill(pid, signal);
}

/** The postmaster and its children, as PostgreSQL shows them by parent. */
function postgresFamily(rig: Rig): number[] {
	const parent = rig.pids().postgresql;
	if (!parent) return [];
	const children = readdirSync('/proc').flatMap((name) => {
		if (!/^\d+$/.test(name)) return [];
		try {
			const ppid = Number(/\) \S (\d+)/.exec(readFileSync(`/proc/${name}/stat`, 'utf8'))?.[1]);
			return ppid === parent ? [Number(name)] : [];
		} catch {
			return []; // ended meanwhile
		}
	});
	return [parent, ...children];
}

function signalAll(pids: readonly number[], signal: NodeJS.Signals): void {
	for (const pid of pids) {
		try {
			process.kill(pid, signal);
		} catch {
			// Ended meanwhile.
		}
	}
}

/** Those that kill the collector come first, so that a long run has one process whose memory can be watched. */
export const FAULTS = {
	'collector-killed': {
		title: 'the collector is killed',
		strike: (rig) => Promise.resolve(kill(rig, 'collector')),
	},
	'collector-killed-in-outage': {
		title: 'PostgreSQL stands still, and the collector is killed meanwhile',
		async strike(rig, seconds) {
			const family = postgresFamily(rig);
			signalAll(family, 'SIGSTOP');
			await pause(seconds / 2);
			kill(rig, 'collector');
			await pause(seconds / 2);
			signalAll(family, 'SIGCONT');
		},
	},
	'postgresql-killed': {
		title: 'PostgreSQL is killed',
		strike: (rig) => Promise.resolve(kill(rig, 'postgresql')),
	},
	'postgresql-stands-still': {
		title: 'PostgreSQL stands still',
		async strike(rig, seconds) {
			const family = postgresFamily(rig);
			signalAll(family, 'SIGSTOP');
			await pause(seconds);
			signalAll(family, 'SIGCONT');
		},
	},
	'web-killed': {
		title: 'the web process is killed',
		strike: (rig) => Promise.resolve(kill(rig, 'web')),
	},
	'broker-restarted': {
		title: 'the broker is started again',
		strike: (rig) => rig.broker.restart(),
	},
	'network-cut': {
		title: 'the line to the broker is cut',
		strike: (rig) => Promise.resolve(rig.proxy.cut()),
	},
	'half-open': {
		title: 'the line to the broker goes dead without a word, then is cut',
		async strike(rig, seconds) {
			rig.proxy.setState('hold');
			await pause(seconds);
			rig.proxy.cut();
			rig.proxy.setState('pass');
		},
	},
	'a-byte-at-a-time': {
		title: 'the line to the broker brings a byte at a time',
		async strike(rig, seconds) {
			rig.proxy.setState('trickle');
			await pause(seconds);
			rig.proxy.setState('pass');
		},
	},
	'publish-every-second': {
		title: 'a revision is published every second',
		async strike(rig, seconds) {
			for (let n = 0; n < Math.max(2, Math.floor(seconds / 2)); n += 1) {
				const description = `at ${Date.now()}`;
				await rig.api.ask('/map/draft', { method: 'PATCH', json: { rows: [{ tag: 'S-0', description }] } });
				await rig.api.ask('/map/draft/publish', { json: { note: 'soak' } });
				await pause(1);
			}
		},
	},
} as const satisfies Record<string, Fault>;

export type FaultName = keyof typeof FAULTS;
