// Pure.
import type { RawScalar } from '#lib/domain/reading.ts';

/** True when a decoded raw scalar is one of the device's "not available" codes, given as numbers or as bit patterns of the ordered bytes. */
export function isSentinel(raw: RawScalar, ordered: Uint8Array | null, sentinels: readonly (number | string)[]): boolean {
	if (sentinels.length === 0) return false;
	for (const sentinel of sentinels) {
		if (typeof sentinel === 'number') {
			if (typeof raw === 'bigint' ? raw === BigInt(Math.trunc(sentinel)) : raw === sentinel) return true;
		} else if (ordered ? samePattern(ordered, sentinel) : typeof raw === 'number' && Number(sentinel) === raw) {
			return true;
		}
	}
	return false;
}

function samePattern(bytes: Uint8Array, pattern: string): boolean {
	let wanted = BigInt(pattern);
	for (let i = bytes.length - 1; i >= 0; i -= 1) {
		if (BigInt(bytes[i] ?? 0) !== (wanted & 255n)) return false;
		wanted >>= 8n;
	}
	return wanted === 0n;
}
