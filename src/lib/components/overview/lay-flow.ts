// Pure.
import { counted } from '../state/format-value.ts';

export interface FlowInput {
	sources: {
		id: string;
		name: string;
		kind: string;
		transport: string | null;
		enabled: boolean;
		state: string;
		tags: number;
		stale: number;
	}[];
	areas: { name: string; machines: { id: number; name: string }[]; alert: number; danger: number; tags: number; stale: number }[];
	strands: { source: string; area: string; tags: number; stale: number; perSecond: number }[];
	readers: { name: string; behind: number; readAt: string }[];
}
interface Strand {
	key: string;
	path: string;
	width: number;
	stale: boolean;
	title: string;
}

const KINDS: Readonly<Record<string, string>> = { opcua: 'OPC UA', modbus: 'Modbus', mqtt: 'MQTT' };

/** Three widths on a log scale: up to 3 readings a second, up to 30, above. */
export function strandWidth(perSecond: number): number {
	return perSecond < 3 ? 1.5 : perSecond < 30 ? 3 : 6;
}

/** `HL-1 to HL-6` for a run of numbered names, otherwise the first names and how many more. */
export function machineRange(names: readonly string[]): string {
	if (names.length === 0) return '';
	if (names.length <= 2) return names.join(', ');
	const split = names.map((name) => /^(.*?)(\d+)$/.exec(name));
	const prefix = split[0]?.[1];
	if (prefix !== undefined && split.every((part) => part?.[1] === prefix)) {
		const numbers = split.map((part) => Number(part?.[2])).sort((a, b) => a - b);
		if (numbers[numbers.length - 1]! - numbers[0]! === numbers.length - 1)
			return `${prefix}${numbers[0]} to ${prefix}${numbers[numbers.length - 1]}`;
	}
	return `${names[0]}, ${names[1]} and ${names.length - 2} more`;
}

/** Mean of where a node's strands end, to put it level with them: fewer crossings. */
function byNeighbours<T>(nodes: T[], levelOf: (node: T) => number | null): T[] {
	return nodes
		.map((node, index) => ({ node, level: levelOf(node) ?? index }))
		.sort((a, b) => a.level - b.level)
		.map(({ node }) => node);
}

/** Places sources left, areas in the middle, readers right, and draws the strands between them. */
export function layFlow(flow: FlowInput, width: number) {
	const rows = Math.max(flow.sources.length, flow.readers.length);
	const isTight = rows > 12;
	const pitch = isTight ? 17 : 52;
	const areaGap = 18;
	const areaHeight = flow.areas.length > 8 ? 30 : 44;
	const height = Math.max(rows * pitch + (isTight ? 40 : 24), flow.areas.length * (areaHeight + areaGap) + 40, 200);
	const sourceX = Math.min(250, width * 0.26);
	const areaWidth = Math.min(170, width * 0.2);
	const areaX = width * 0.5 - areaWidth / 2;
	const readerX = width - Math.min(250, width * 0.22);

	const spread = (count: number, gap: number) => {
		const total = (count - 1) * gap;
		const top = (height - 14 - total) / 2;
		return (index: number) => top + index * gap;
	};
	const sourceY = spread(flow.sources.length, Math.min(pitch, (height - 40) / Math.max(1, flow.sources.length - 1 || 1)));
	const areas = byNeighbours([...flow.areas], (area) => {
		const own = flow.strands.filter((strand) => strand.area === area.name);
		const weight = own.reduce((sum, strand) => sum + strand.tags, 0);
		if (weight === 0) return null;
		return (
			own.reduce((sum, strand) => sum + flow.sources.findIndex((source) => source.id === strand.source) * strand.tags, 0) / weight
		);
	});
	const areaY = spread(
		areas.length,
		Math.min(areaHeight + Math.max(areaGap, 34), (height - areaHeight - 24) / Math.max(1, areas.length - 1)),
	);
	const readerY = spread(flow.readers.length, Math.min(63, (height - 50) / Math.max(1, flow.readers.length - 1)));

	const curve = (x0: number, y0: number, x1: number, y1: number) => {
		const middle = (x0 + x1) / 2;
		return `M${x0} ${y0}C${middle} ${y0} ${middle} ${y1} ${x1} ${y1}`;
	};
	const strands: Strand[] = [];
	areas.forEach((area, areaIndex) => {
		const incoming = flow.strands
			.filter((strand) => strand.area === area.name)
			.sort((a, b) => indexOf(flow, a.source) - indexOf(flow, b.source));
		const step = Math.min(9, (areaHeight - 8) / Math.max(1, incoming.length));
		incoming.forEach((strand, index) => {
			const source = flow.sources[indexOf(flow, strand.source)];
			if (!source) return;
			const y0 = sourceY(indexOf(flow, strand.source));
			const y1 = areaY(areaIndex) + (index - (incoming.length - 1) / 2) * step;
			const title = `${source.name} to ${area.name}: ${counted(strand.tags, 'tag')}${strand.stale > 0 ? `, ${strand.stale} stale` : ''}`;
			const isAllStale = strand.stale >= strand.tags;
			if (!isAllStale)
				strands.push({
					key: `in-${strand.source}-${area.name}`,
					path: curve(sourceX, y0, areaX, y1),
					width: strandWidth(strand.perSecond),
					stale: false,
					title,
				});
			if (strand.stale > 0)
				strands.push({
					key: `in-stale-${strand.source}-${area.name}`,
					path: curve(sourceX, y0, areaX, y1 + (isAllStale ? 0 : 3)),
					width: 2.2,
					stale: true,
					title,
				});
		});
		const rate = incoming.reduce((sum, strand) => sum + strand.perSecond, 0);
		const outStep = Math.min(9, (areaHeight - 8) / Math.max(1, flow.readers.length));
		flow.readers.forEach((reader, index) => {
			const y0 = areaY(areaIndex) + (index - (flow.readers.length - 1) / 2) * outStep;
			const path = curve(areaX + areaWidth, y0, readerX, readerY(index));
			strands.push({
				key: `out-${area.name}-${reader.name}`,
				path,
				width: strandWidth(rate),
				stale: false,
				title: `${area.name} to ${reader.name}`,
			});
			// A stale source is missed as far as the last receiver.
			if (area.stale > 0)
				strands.push({
					key: `out-stale-${area.name}-${reader.name}`,
					path: curve(areaX + areaWidth, y0 + 4, readerX, readerY(index) + 3),
					width: 1.8,
					stale: true,
					title: `${counted(area.stale, 'tag')} of ${area.name} missed by ${reader.name}`,
				});
		});
	});
	// Broken strands lie on top.
	strands.sort((a, b) => Number(a.stale) - Number(b.stale));

	return {
		width,
		height,
		isTight,
		readerX,
		strands,
		sources: flow.sources.map((source, index) => ({
			id: source.id,
			name: source.name,
			x: sourceX,
			y: sourceY(index),
			isStale: source.stale > 0 || source.state === 'lost',
			isOff: !source.enabled,
			note: [
				source.transport === 'sparkplug' ? 'Sparkplug' : (KINDS[source.kind] ?? source.kind),
				source.enabled ? `${counted(source.tags, 'tag')}${source.stale > 0 ? `, ${source.stale} stale` : ''}` : 'off',
			].join(' · '),
		})),
		areas: areas.map((area, index) => ({
			name: area.name,
			x: areaX,
			y: areaY(index),
			width: areaWidth,
			height: areaHeight,
			alert: area.alert,
			danger: area.danger,
			note: areaHeight > 36 ? machineRange(area.machines.map((machine) => machine.name)) : '',
		})),
		readers: flow.readers.map((reader, index) => ({
			name: reader.name,
			x: readerX,
			y: readerY(index),
			note: reader.behind > 0 ? `REST · ${counted(reader.behind, 'reading')} behind` : 'REST · up to date',
		})),
	};
}

function indexOf(flow: FlowInput, source: string): number {
	return flow.sources.findIndex((candidate) => candidate.id === source);
}
