// Edge: cli. May touch: child processes. A cluster for benchmarks: its own folder and port, fsync on as in the product.
import { mkdtempSync, chmodSync, rmSync } from 'node:fs';
import { tmpdir } from 'node:os';
import { join } from 'node:path';
import { prepareCluster, prepareDatabase } from './cluster.ts';
import { findFreePort } from './throwaway-product.ts';

/** Starts it; `url` is the owner's address of a fresh database. */
export async function createBenchCluster(): Promise<{ url: string; remove(): Promise<void> }> {
	const folder = mkdtempSync(join(tmpdir(), 'millrace-bench-'));
	chmodSync(folder, 0o755);
	const cluster = prepareCluster(folder, await findFreePort());
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
