// Pure.
/** A bucket of permits: starts full, refills steadily, each request takes one. */
export interface Bucket {
	permits: number;
	/** Milliseconds of the clock that `take` is given. */
	at: number;
}

export interface BucketRule {
	perSecond: number;
	burst: number;
}

/** Takes one permit if there is one. Answers the bucket as it stands afterwards and how long until the next permit, in seconds. */
export function take(
	bucket: Bucket | undefined,
	rule: BucketRule,
	nowMs: number,
): { allowed: boolean; bucket: Bucket; waitS: number } {
	const before = bucket
		? Math.min(rule.burst, bucket.permits + (Math.max(0, nowMs - bucket.at) / 1_000) * rule.perSecond)
		: rule.burst;
	const allowed = before >= 1;
	const permits = allowed ? before - 1 : before;
	return { allowed, bucket: { permits, at: nowMs }, waitS: permits >= 1 ? 0 : (1 - permits) / rule.perSecond };
}
