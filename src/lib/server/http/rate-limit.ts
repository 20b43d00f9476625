// Edge: http. May touch: Request, Response, URL. Keeps counts in this process's memory.
import { take, type Bucket, type BucketRule } from './token-bucket.ts';

/** Requests a second and burst, for each key, person or (where nobody is known) address. */
export const API_RATE: BucketRule = { perSecond: 100, burst: 400 };

/** More callers than this within four seconds are forgotten oldest first. */
const MOST_CALLERS = 50_000;

const buckets = new Map<string, Bucket>();

/** Counts one request of `caller` and answers the `RateLimit-*` headers with it. */
export function countRequest(caller: string, nowMs = performance.now()): { allowed: boolean; headers: Record<string, string> } {
	const taken = take(buckets.get(caller), API_RATE, nowMs);
	// Taken out first, so that the map's order is that of the last use.
	buckets.delete(caller);
	buckets.set(caller, taken.bucket);
	if (buckets.size > MOST_CALLERS) {
		const oldest = buckets.keys().next();
		if (!oldest.done) buckets.delete(oldest.value);
	}
	const missing = API_RATE.burst - taken.bucket.permits;
	const headers: Record<string, string> = {
		'ratelimit-policy': `"default";q=${API_RATE.burst};w=${API_RATE.burst / API_RATE.perSecond}`,
		'ratelimit-limit': String(API_RATE.burst),
		'ratelimit-remaining': String(Math.floor(taken.bucket.permits)),
		'ratelimit-reset': String(Math.ceil(missing / API_RATE.perSecond)),
	};
	if (!taken.allowed) headers['retry-after'] = String(Math.max(1, Math.ceil(taken.waitS)));
	return { allowed: taken.allowed, headers };
}
