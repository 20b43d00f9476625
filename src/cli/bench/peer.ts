// Edge: cli. May touch: child processes. The other side of a benchmark, in a process of its own, so that its work is not counted as ours.
import { type ChildProcess, spawn } from 'node:child_process';
import { once } from 'node:events';
import { fileURLToPath } from 'node:url';

export interface Peer {
	child: ChildProcess;
	/** Sends a line to its standard input. */
	say(line: string): void;
	stop(): Promise<void>;
}

/** Starts a script beside this file and waits until it says `ready`. */
export async function startPeer(script: string, args: readonly string[]): Promise<Peer> {
	const file = fileURLToPath(new URL(script, import.meta.url));
	const child = spawn(process.execPath, ['--import', 'tsx', file, ...args], { stdio: ['pipe', 'pipe', 'inherit'] });
	await new Promise<void>((resolve, reject) => {
		child.stdout?.on('data', (text: Buffer) => text.toString().includes('ready') && resolve());
		child.once('exit', (code) => reject(new Error(`${script} ended with ${code}`)));
	});
	return {
		child,
		say: (line) => child.stdin?.write(`${line}\n`),
		async stop() {
			if (child.exitCode !== null || child.signalCode !== null) return;
			const ended = once(child, 'exit');
			child.kill('SIGTERM');
			await ended;
		},
	};
}

/** Seconds of CPU that this process has used. */
export function cpuSeconds(): number {
	const { user, system } = process.cpuUsage();
	return (user + system) / 1e6;
}
