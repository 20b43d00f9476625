// Edge: cli. May touch: child processes. The whole product with its demo, on free ports and in a folder that goes with it.
import { type ChildProcess, spawn } from 'node:child_process';
import { chmodSync, mkdtempSync, rmSync } from 'node:fs';
import { createServer } from 'node:net';
import { tmpdir } from 'node:os';
import { join } from 'node:path';

const READY_MS = 180_000;
const PORTS = [
	'PORT',
	'MILLRACE_PG_PORT',
	'SIM_OPCUA_PORT',
	'SIM_HISTORY_PORT',
	'SIM_MODBUS_PORT',
	'SIM_RTU_PORT',
	'SIM_MQTT_PORT',
	'SIM_SMTP_PORT',
	'SIM_RECEIVER_PORT',
	'SIM_CONTROL_PORT',
] as const;

/** A running product that nobody else uses. */
export interface ThrowawayProduct {
	origin: string;
	controlPort: number;
	/** Settings under which `npm run admin` speaks to it. */
	env: Record<string, string>;
	/** What the start printed. */
	printed: string;
	/** Process id of the start, which ends all others. */
	pid: number;
	/** Stops it in order and removes its folder. */
	remove(): Promise<void>;
}

/** A port that nothing listens on just now. */
export function findFreePort(): Promise<number> {
	return new Promise((resolve, reject) => {
		const server = createServer();
		server.once('error', reject);
		server.listen(0, '127.0.0.1', () => {
			const address = server.address();
			server.close(() => resolve(address !== null && typeof address === 'object' ? address.port : 0));
		});
	});
}

/** Starts it as `npm start` does. Throws with all that was printed when it does not get ready. */
export async function startThrowawayProduct(args: readonly string[] = []): Promise<ThrowawayProduct> {
	const folder = mkdtempSync(join(tmpdir(), 'millrace-throwaway-'));
	chmodSync(folder, 0o755); // PostgreSQL's own user must get in when root runs this
	const env: Record<string, string> = { MILLRACE_DATA: join(folder, 'data') };
	for (const name of PORTS) env[name] = String(await findFreePort());
	const child: ChildProcess = spawn(process.execPath, ['src/cli/start.js', ...args], {
		env: { ...process.env, ...env },
		stdio: ['ignore', 'pipe', 'pipe'],
	});
	const ended = new Promise((resolve) => child.once('exit', resolve));
	const remove = async () => {
		child.kill('SIGTERM');
		await ended;
		rmSync(folder, { recursive: true, force: true });
	};
	let printed = '';
	child.stdout?.on('data', (text: Buffer) => (printed += text.toString()));
	child.stderr?.on('data', (text: Buffer) => (printed += text.toString()));
	const deadline = Date.now() + READY_MS;
	while (!printed.includes('Millrace is at')) {
		if (child.exitCode !== null || Date.now() > deadline) {
			await remove();
			throw new Error(`the product did not start:\n${printed}`);
		}
		await new Promise((resolve) => setTimeout(resolve, 100));
	}
	return {
		origin: `http://127.0.0.1:${env.PORT}`,
		controlPort: Number(env.SIM_CONTROL_PORT),
		env,
		printed,
		pid: child.pid ?? 0,
		remove,
	};
}
