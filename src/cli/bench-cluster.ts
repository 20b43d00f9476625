// Edge: cli. May touch: child processes. A cluster for benchmarks: its own folder and port, fsync on as in the product.
import { mkdtempSync, chmodSync, rmSync } from 'node:fs';
import { createServer } from 'node:net';
import { tmpdir } from 'node:os';
import { join } from 'node:path';
import { prepareCluster, prepareDatabase } from './cluster.ts';

/** A port that nothing listens on just now. */
function freePort(): Promise<number> {
	return new Promise((resolve, reject) => {
		const server = createServer();
		server.once('error', reject);
		server.listen(0, '127.0.0.1', () => {
			const address = server.address();
			server.close(() => resolve(address !== null && typeof address === 'object' ? address.port : 0));
		});
	});
}

/** Starts it; `url` is the owner's address of a fresh database. */
export async function createBenchCluster(): Promise<{ url: string; remove(): Promise<void> }> {
	const folder = mkdtempSync(join(tmpdir(), 'millrace-bench-'));
	chmodSync(folder, 0o755);
	const cluster = prepareCluster(folder, await freePort());
	const child = cluster.run();
	child.stderr?.resume();
	await prepareDatabase(cluster.addresses, folder);
	return {
		url: cluster.addresses.owner,
		remove: async () => {
			const ended = new Promise((resolve) => child.once('exit', resolve));
			child.kill('SIGINT');
			await ended;
			rmSync(folder, { recursive: true, force: true });
		},
	};
}
