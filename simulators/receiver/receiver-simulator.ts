// Edge: simulators. May touch: protocol servers, domain.
import { createServer } from 'node:http';

const MOST_KEPT = 200;
const MOST_BYTES = 1_000_000;

export interface Received {
	at: string;
	method: string;
	path: string;
	headers: Record<string, string>;
	body: string;
	/** The status it was answered with. */
	status: number;
}
export interface ReceiverSimulator {
	readonly port: number;
	/** The last 200, oldest first. */
	received(): readonly Received[];
	/** The next `count` requests are answered with this status. */
	fail(count: number, status?: number): void;
	stop(): Promise<void>;
}

/** Takes text messages and webhooks on 127.0.0.1 and keeps what it got. */
export function startReceiverSimulator({ port }: { port: number }): Promise<ReceiverSimulator> {
	const kept: Received[] = [];
	let failing = { count: 0, status: 503 };
	const server = createServer((request, response) => {
		const chunks: Buffer[] = [];
		let size = 0;
		request.on('data', (chunk: Buffer) => {
			size += chunk.length;
			if (size <= MOST_BYTES) chunks.push(chunk);
		});
		request.on('end', () => {
			const isFailing = failing.count > 0;
			if (isFailing) failing.count--;
			const status = size > MOST_BYTES ? 413 : isFailing ? failing.status : 202;
			const headers = Object.fromEntries(
				Object.entries(request.headers).map(([name, value]) => [name, Array.isArray(value) ? value.join(', ') : (value ?? '')]),
			);
			kept.push({
				at: new Date().toISOString(),
				method: request.method ?? '',
				path: request.url ?? '',
				headers,
				body: Buffer.concat(chunks).toString('utf8'),
				status,
			});
			if (kept.length > MOST_KEPT) kept.shift();
			response.writeHead(status, { 'content-type': 'application/json' });
			response.end(JSON.stringify({ accepted: status < 300 }));
		});
	});
	return new Promise((resolve, reject) => {
		server.once('error', reject);
		server.listen(port, '127.0.0.1', () => {
			const address = server.address();
			resolve({
				port: address !== null && typeof address === 'object' ? address.port : port,
				received: () => kept,
				fail: (count, status = 503) => {
					failing = { count, status };
				},
				stop: () =>
					new Promise<void>((done) => {
						server.close(() => done());
						server.closeAllConnections();
					}),
			});
		});
	});
}
