// Interface. Draws what stands around a trend’s line. May touch: the canvas it is given.
import type uPlot from 'uplot';
import { limitText } from '../state/format-value.ts';
import type { TrendColumns } from './trend-data.ts';

/** A limit over the stretch of time in which it was in force; milliseconds, `to` null while it stands. */
export interface TrendLimit {
	kind: 'high' | 'low';
	level: 'alert' | 'danger';
	value: number;
	from: number;
	to: number | null;
	words: string;
}
export interface TrendEvent {
	at: number;
	words: string;
	level: 'alert' | 'danger' | null;
}
/** A token's colour by its name. */
export type Colour = (name: string) => string;

const GLYPH = { alert: 'M0 0H10V12H0V9L5.4 6L0 3Z', danger: 'M0 0H10V12H0V11L5.2 8.75L0 6.5V5.5L5.2 3.25L0 1Z' } as const;
/** Least distance between two labels of the margin, CSS pixels. */
const LABEL_GAP = 31;

/** Lines of the limits, each over its own time, joined where one took the place of another; labels of those that stand at the right edge. */
export function drawLimits(u: uPlot, limits: readonly TrendLimit[], colour: Colour, ratio: number): void {
	const { ctx, bbox } = u;
	const right = bbox.left + bbox.width;
	const edgeMs = (u.scales.x?.max ?? 0) * 1_000;
	const xOf = (ms: number) => Math.max(bbox.left, Math.min(right, u.valToPos(ms / 1_000, 'x', true)));
	const yOf = (value: number) => Math.round(u.valToPos(value, 'y', true));
	ctx.save();
	ctx.beginPath();
	ctx.rect(bbox.left, bbox.top - ratio, bbox.width, bbox.height + 2 * ratio);
	ctx.clip();
	ctx.lineWidth = ratio;
	for (const limit of limits) {
		const y = yOf(limit.value);
		ctx.strokeStyle = colour(limit.level);
		ctx.setLineDash([5 * ratio, 4 * ratio]);
		ctx.beginPath();
		ctx.moveTo(xOf(limit.from), y);
		ctx.lineTo(xOf(limit.to ?? edgeMs), y);
		const next = limits.find(
			(one) => one.kind === limit.kind && one.level === limit.level && limit.to !== null && Math.abs(one.from - limit.to) < 1_000,
		);
		if (next) ctx.lineTo(xOf(next.from), yOf(next.value));
		ctx.stroke();
	}
	ctx.restore();
	const standing = limits
		.filter((limit) => limit.to === null || limit.to >= edgeMs)
		.map((limit) => ({ limit, y: yOf(limit.value) }))
		.filter(({ y }) => y >= bbox.top - 1 && y <= bbox.top + bbox.height + 1)
		.sort((a, b) => a.y - b.y);
	let free = -Infinity;
	for (const { limit, y } of standing) {
		const at = Math.max(y, free);
		free = at + (limit.words ? LABEL_GAP : 17) * ratio;
		drawLabel(ctx, limit, right + 6 * ratio, at, colour, ratio);
	}
}

function drawLabel(ctx: CanvasRenderingContext2D, limit: TrendLimit, x: number, y: number, colour: Colour, ratio: number): void {
	ctx.save();
	// The glyph, the same as everywhere, then the words.
	ctx.save();
	ctx.translate(x, y - 6 * ratio);
	ctx.scale(ratio * 0.95, ratio * 0.95);
	ctx.fillStyle = colour(limit.level);
	ctx.fill(new Path2D(GLYPH[limit.level]));
	ctx.restore();
	ctx.textBaseline = 'middle';
	ctx.textAlign = 'left';
	ctx.fillStyle = colour(`${limit.level}-ink`);
	ctx.font = `560 ${12 * ratio}px 'Archivo Variable'`;
	ctx.fillText(`${limit.level} ${limitText(limit.value)}`, x + 15 * ratio, y);
	if (limit.words) {
		ctx.fillStyle = colour('ink-second');
		ctx.font = `${11.5 * ratio}px 'Archivo Variable'`;
		ctx.fillText(limit.words, x + 15 * ratio, y + 14 * ratio);
	}
	ctx.restore();
}

/** Quality as a band under the axis: even where good, broken where nothing came, dotted where bad, thin where uncertain. */
export function drawQuality(u: uPlot, bands: TrendColumns['bands'], colour: Colour, ratio: number): void {
	const { ctx, bbox } = u;
	const y = bbox.top + bbox.height + 9 * ratio;
	const line = (x0: number, x1: number, token: string, width: number, dash: number[]) => {
		ctx.strokeStyle = colour(token);
		ctx.lineWidth = width * ratio;
		ctx.setLineDash(dash.map((length) => length * ratio));
		ctx.beginPath();
		ctx.moveTo(x0, y);
		ctx.lineTo(x1, y);
		ctx.stroke();
	};
	ctx.save();
	line(bbox.left, bbox.left + bbox.width, 'line-strong', 4, []);
	for (const band of bands) {
		const x0 = Math.max(bbox.left, u.valToPos(band.from, 'x', true));
		const x1 = Math.min(bbox.left + bbox.width, u.valToPos(band.to, 'x', true));
		if (x1 <= x0) continue;
		const end = Math.max(x1, x0 + 2);
		line(x0, end, 'panel', 6, []);
		if (band.kind === 'gap') line(x0, end, 'stale', 4, [6, 4]);
		else if (band.kind === 'bad') line(x0, end, 'ink-second', 4, [2, 2]);
		else line(x0, end, 'ink-second', 2, []);
	}
	ctx.restore();
}

/** Events as ticks at the top; their words where they run into no others, those of alarms first. */
export function drawEvents(u: uPlot, events: readonly TrendEvent[], colour: Colour, ratio: number): void {
	const { ctx, bbox } = u;
	const right = bbox.left + bbox.width;
	const top = bbox.top - 12 * ratio;
	ctx.save();
	ctx.textBaseline = 'middle';
	ctx.textAlign = 'left';
	ctx.font = `${11.5 * ratio}px 'Archivo Variable'`;
	ctx.lineWidth = 1.4 * ratio;
	const placed = events
		.map((event) => ({ event, x: u.valToPos(event.at / 1_000, 'x', true) }))
		.filter(({ x }) => x >= bbox.left && x <= right)
		.sort((a, b) => Number(b.event.level !== null) - Number(a.event.level !== null) || b.event.at - a.event.at);
	const taken: [number, number][] = placed.map(({ x }) => [x - ratio, x + ratio]);
	for (const { event, x } of placed) {
		ctx.strokeStyle = colour(event.level ?? 'ink-second');
		ctx.beginPath();
		ctx.moveTo(x, top);
		ctx.lineTo(x, top + 11 * ratio);
		ctx.stroke();
		const width = ctx.measureText(event.words).width;
		// Left of its tick where there is no room on the right.
		for (const start of [x + 4 * ratio, x - 4 * ratio - width]) {
			const end = start + width;
			if (start < bbox.left || end > right || taken.some(([from, to]) => start - 3 * ratio < to && end + 3 * ratio > from))
				continue;
			ctx.fillStyle = colour(event.level ? `${event.level}-ink` : 'ink-second');
			ctx.fillText(event.words, start, top + 4 * ratio);
			taken.push([start, end]);
			break;
		}
	}
	ctx.restore();
}

/** A fine line through the moment whose way the trace shows. */
export function drawPicked(u: uPlot, at: number | null, colour: Colour, ratio: number): void {
	if (at === null) return;
	const { ctx, bbox } = u;
	const x = u.valToPos(at / 1_000, 'x', true);
	if (x < bbox.left || x > bbox.left + bbox.width) return;
	ctx.save();
	ctx.strokeStyle = colour('water');
	ctx.lineWidth = 1.4 * ratio;
	ctx.beginPath();
	ctx.moveTo(x, bbox.top);
	ctx.lineTo(x, bbox.top + bbox.height);
	ctx.stroke();
	ctx.restore();
}

/** Where the value axis begins and ends: zero where nothing is below it, and past the highest limit, so that how far away it is can be seen. */
export function valueRange(min: number | null, max: number | null, limits: readonly { value: number }[]): [number, number] {
	const all = [min, max, ...limits.map((limit) => limit.value)].filter(
		(value): value is number => value !== null && Number.isFinite(value),
	);
	if (all.length === 0) return [0, 1];
	const low = Math.min(...all, limits.length > 0 && Math.min(...all) >= 0 ? 0 : Infinity);
	const high = Math.max(...all);
	const room = (high - low || Math.abs(high) || 1) * 0.1;
	return [low === 0 ? 0 : low - room, high + room];
}
