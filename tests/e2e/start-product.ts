// Tests. Starts the product as `npm start` does, on free ports and in a throwaway data folder; ends it afterwards.
import { startThrowawayProduct } from '../../src/cli/throwaway-product.ts';

/** What browser tests need to know of the product under test. */
export interface Product {
	origin: string;
	controlPort: number;
	env: Record<string, string>;
}

export default async function start(): Promise<() => Promise<void>> {
	const { origin, controlPort, env, remove } = await startThrowawayProduct();
	process.env.E2E_ORIGIN = origin;
	process.env.E2E_PRODUCT = JSON.stringify({ origin, controlPort, env } satisfies Product);
	return remove;
}
