import { describe, expect, it } from 'vitest';
import { FAULTS, type FaultName } from '../../src/cli/soak/faults.ts';
import { runSoak } from '../../src/cli/soak/run-soak.ts';

const FAULT_EVERY_S = 7;

describe('the ledger of numbered samples through the whole product', () => {
	it('closes under every fault: sent is stored and told, each once, and the feed delivers what is stored, each once', async () => {
		const names = Object.keys(FAULTS) as FaultName[];
		const result = await runSoak({
			seconds: (names.length + 1) * FAULT_EVERY_S,
			rate: 500,
			faultEveryS: FAULT_EVERY_S,
			say: () => undefined,
		});
		expect(result.faults.map(({ name }) => name)).toEqual(names);
		expect(result.sent).toBeGreaterThan(10_000);
		expect({ unreported: result.unreported, doubled: result.doubled, deliveredTwice: result.deliveredTwice }).toEqual({
			unreported: 0,
			doubled: 0,
			deliveredTwice: 0,
		});
		expect(result.stored + result.reported).toBe(result.sent);
		expect(result.delivered).toBe(result.stored);
	}, 420_000);
});
