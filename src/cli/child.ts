// Edge: cli. May touch: child processes.
import type { ChildProcess } from 'node:child_process';

/** A process that is kept running: restarted within 5 s when it ends by itself, ended in order on `stop`. */
export interface Kept {
	name: string;
	stop(signal?: NodeJS.Signals): Promise<void>;
	readonly pid: number | undefined;
}

/**
 * Keeps a process running. A process that dies at once again and again is restarted more slowly, at most every 5 s.
 * `onLine` gets what it writes to standard error.
 */
export function keepRunning(
	name: string,
	run: () => ChildProcess,
	onLine: (name: string, line: string) => void,
	onStart: () => void = () => undefined,
): Kept {
	let child: ChildProcess | undefined;
	let stopping = false;
	let startedAt = 0;
	let quickDeaths = 0;
	let timer: NodeJS.Timeout | undefined;
	const launch = () => {
		startedAt = Date.now();
		child = run();
		onStart();
		const started = child;
		for (const stream of [started.stdout, started.stderr]) {
			let rest = '';
			stream?.setEncoding('utf8').on('data', (text: string) => {
				const lines = (rest + text).split('\n');
				rest = lines.pop() ?? '';
				// Standard output is for log lines; greetings of servers are nobody's news.
				for (const line of lines) if (line.startsWith('{') || (line && stream === started.stderr)) onLine(name, line);
			});
		}
		child.on('error', (error) => onLine(name, `could not be started: ${error.message}`));
		child.on('exit', (code, signal) => {
			if (stopping) return;
			quickDeaths = Date.now() - startedAt < 3_000 ? quickDeaths + 1 : 0;
			const waitMs = Math.min(200 * 2 ** quickDeaths, 4_500);
			console.error(`${name} ended (${signal ?? `exit code ${code}`}); starting it again`);
			timer = setTimeout(launch, waitMs);
		});
	};
	launch();
	return {
		name,
		get pid() {
			return child?.pid;
		},
		async stop(signal: NodeJS.Signals = 'SIGTERM') {
			stopping = true;
			clearTimeout(timer);
			const running = child;
			if (!running || running.exitCode !== null || running.signalCode !== null) return;
			await new Promise<void>((resolve) => {
				// An orderly stop has its own bounds; this one is for a process that hangs.
				const hard = setTimeout(() => running.kill('SIGKILL'), 20_000);
				running.once('exit', () => {
					clearTimeout(hard);
					resolve();
				});
				running.kill(signal);
			});
		},
	};
}
