// Tests. Starts the product as `npm start` does, on free ports and in a throwaway data folder; ends it afterwards.
import { type ChildProcess, spawn } from 'node:child_process';
import { chmodSync, mkdtempSync, rmSync, writeFileSync } from 'node:fs';
import { tmpdir } from 'node:os';
import { join } from 'node:path';
import { freePort } from '../support/cluster.ts';

const READY_MS = 120_000;

/** What browser tests need to know of the product under test. */
export interface Product {
	origin: string;
	dataFolder: string;
	controlPort: number;
	env: Record<string, string>;
}

export default async function start(): Promise<() => Promise<void>> {
	const dataFolder = mkdtempSync(join(tmpdir(), 'millrace-e2e-'));
	chmodSync(dataFolder, 0o755);
	const names = [
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
	];
	const ports: Record<string, string> = {};
	for (const name of names) ports[name] = String(await freePort());
	const env: Record<string, string> = { ...ports, MILLRACE_DATA: join(dataFolder, 'data') };
	const child: ChildProcess = spawn(process.execPath, ['src/cli/start.js'], {
		env: { ...process.env, ...env },
		stdio: ['ignore', 'pipe', 'pipe'],
	});
	let printed = '';
	child.stdout?.on('data', (text: Buffer) => (printed += text.toString()));
	child.stderr?.on('data', (text: Buffer) => (printed += text.toString()));
	const deadline = Date.now() + READY_MS;
	while (!printed.includes('Millrace is at')) {
		if (child.exitCode !== null || Date.now() > deadline) throw new Error(`the product did not start:\n${printed}`);
		await new Promise((resolve) => setTimeout(resolve, 100));
	}
	const origin = `http://127.0.0.1:${ports.PORT}`;
	process.env.E2E_ORIGIN = origin;
	const product: Product = { origin, dataFolder, controlPort: Number(ports.SIM_CONTROL_PORT), env };
	process.env.E2E_PRODUCT = JSON.stringify(product);
	writeFileSync(join(dataFolder, 'printed.txt'), printed);
	return async () => {
		const ended = new Promise((resolve) => child.once('exit', resolve));
		child.kill('SIGTERM');
		await ended;
		rmSync(dataFolder, { recursive: true, force: true });
	};
}
