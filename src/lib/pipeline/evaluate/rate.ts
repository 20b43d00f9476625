// Pure.
/**
 * Rate of change by least squares over points of a window.
 *
 * Units:    points are [milliseconds, value]; the result is value per minute.
 * Source:   ordinary least squares, slope = Σ(t − t̄)(v − v̄) / Σ(t − t̄)².
 * Null with fewer than two different times.
 */
export function ratePerMinute(points: readonly (readonly [number, number])[]): number | null {
	const n = points.length;
	if (n < 2) return null;
	const t0 = points[0]?.[0] ?? 0;
	let sumT = 0;
	let sumV = 0;
	for (const [t, v] of points) {
		sumT += (t - t0) / 60_000;
		sumV += v;
	}
	const meanT = sumT / n;
	const meanV = sumV / n;
	let top = 0;
	let bottom = 0;
	for (const [t, v] of points) {
		const dt = (t - t0) / 60_000 - meanT;
		top += dt * (v - meanV);
		bottom += dt * dt;
	}
	return bottom === 0 ? null : top / bottom;
}
