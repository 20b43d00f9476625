import { once } from 'node:events';
import { connect, createServer, type Server, type Socket } from 'node:net';
import { afterAll, beforeAll, expect, it } from 'vitest';
import { startFaultProxy, type FaultProxy } from '../../src/cli/soak/fault-proxy.ts';

let server: Server;
let proxy: FaultProxy;
/** What the far side has heard, a chunk at a time. */
let heard: string[] = [];

beforeAll(async () => {
	server = createServer((socket) => {
		socket.on('error', () => undefined);
		socket.on('data', (chunk: Buffer) => heard.push(chunk.toString()));
	});
	server.listen(0, '127.0.0.1');
	await once(server, 'listening');
	proxy = await startFaultProxy((server.address() as { port: number }).port);
});
afterAll(async () => {
	await proxy.close();
	server.close();
});

async function open(): Promise<Socket> {
	heard = [];
	const socket = connect(proxy.port, '127.0.0.1');
	socket.on('error', () => undefined);
	await once(socket, 'connect');
	return socket;
}
async function until(what: () => boolean): Promise<void> {
	for (let tries = 0; !what(); tries += 1) {
		if (tries > 400) throw new Error('it did not happen in time');
		await new Promise((resolve) => setTimeout(resolve, 10));
	}
}

it('passes what it hears, holds it without a word, and gives it on in its order', async () => {
	const socket = await open();
	socket.write('one ');
	await until(() => heard.join('') === 'one ');
	proxy.setState('hold');
	socket.write('two ');
	socket.write('three');
	await new Promise((resolve) => setTimeout(resolve, 100));
	expect(heard.join('')).toBe('one ');
	expect(socket.destroyed).toBe(false);
	proxy.setState('pass');
	await until(() => heard.join('') === 'one two three');
	socket.destroy();
});

it('brings a byte at a time, all of them', async () => {
	const socket = await open();
	proxy.setState('trickle');
	socket.write('abcdefghijklmnopqrstuvwxyz');
	await until(() => heard.join('') === 'abcdefghijklmnopqrstuvwxyz');
	expect(heard.length).toBeGreaterThan(3);
	proxy.setState('pass');
	socket.destroy();
});

it('cuts with a reset', async () => {
	const socket = await open();
	const failed = new Promise<string>((resolve) =>
		socket.once('error', (error: NodeJS.ErrnoException) => resolve(error.code ?? '')),
	);
	proxy.cut();
	expect(await failed).toBe('ECONNRESET');
});
