// Tests. Vitest's global set-up: one cluster for the run, told to workers by environment.
import { createCluster, createTemplate } from './cluster.ts';

export default async function setup(): Promise<() => void> {
	const cluster = await createCluster();
	await createTemplate(cluster);
	process.env.TEST_CLUSTER_URL = cluster.url;
	process.env.MILLRACE_LOG ??= 'silent';
	return () => cluster.remove();
}
