// Pure.
import { qualityJson, type QualityJson } from '#lib/domain/quality.ts';
import { neutralise, csvCell } from '#lib/domain/tag-map/csv.ts';

/** What a feed entry needs to become JSON; the store's entries have this shape. */
export type FeedEntryLike =
	| { kind: 'reading'; tagId: number; at: number; value: number | null; quality: number; isHubTime: boolean; isTest: boolean }
	| { kind: 'event'; event: { event: string; at: number; tagId?: number; tag?: string; [detail: string]: unknown } };

export interface FactsLike {
	name: string;
	unit: string;
}

export interface ReadingItem {
	kind: 'reading';
	tag_id: number;
	tag: string;
	at: string;
	value: number | null;
	unit: string;
	quality: QualityJson;
	time_from: 'source' | 'hub';
	test?: true;
}
export interface EventItem {
	kind: 'event';
	event: string;
	at: string;
	tag_id?: number;
	tag?: string;
	[detail: string]: unknown;
}
export type FeedItem = ReadingItem | EventItem;

/** A feed entry as every feed over HTTP shows it. */
export function toFeedItem(entry: FeedEntryLike, facts: ReadonlyMap<number, FactsLike>): FeedItem {
	if (entry.kind === 'event') {
		const { event, at, tagId, tag, siteId: _, ...detail } = entry.event;
		return {
			kind: 'event',
			event,
			at: new Date(at).toISOString(),
			...(tagId === undefined ? {} : { tag_id: tagId }),
			...(tag === undefined ? {} : { tag }),
			...detail,
		};
	}
	const known = facts.get(entry.tagId);
	return {
		kind: 'reading',
		tag_id: entry.tagId,
		tag: known?.name ?? '',
		at: new Date(entry.at).toISOString(),
		value: entry.value,
		unit: known?.unit ?? '',
		quality: qualityJson(entry.quality),
		time_from: entry.isHubTime ? 'hub' : 'source',
		...(entry.isTest ? { test: true as const } : {}),
	};
}

/** Writes feed entries as NDJSON lines; what repeats is made once: the tag's part a tag, the quality's part a code, the time's a millisecond. */
export function createFeedLines(facts: ReadonlyMap<number, FactsLike>): (entry: FeedEntryLike) => string {
	const heads = new Map<number, [string, string]>();
	const qualities = new Map<number, string>();
	let lastAt = Number.NaN;
	let lastText = '';
	return (entry) => {
		if (entry.kind === 'event') return `${JSON.stringify(toFeedItem(entry, facts))}\n`;
		let head = heads.get(entry.tagId);
		if (!head) {
			const known = facts.get(entry.tagId);
			head = [
				`{"kind":"reading","tag_id":${entry.tagId},"tag":${JSON.stringify(known?.name ?? '')},"at":"`,
				`,"unit":${JSON.stringify(known?.unit ?? '')},"quality":`,
			];
			heads.set(entry.tagId, head);
		}
		let quality = qualities.get(entry.quality);
		if (quality === undefined) {
			quality = `${JSON.stringify(qualityJson(entry.quality))},"time_from":`;
			qualities.set(entry.quality, quality);
		}
		if (entry.at !== lastAt) {
			lastAt = entry.at;
			lastText = new Date(entry.at).toISOString();
		}
		return `${head[0]}${lastText}","value":${entry.value}${head[1]}${quality}${entry.isHubTime ? '"hub"' : '"source"'}${entry.isTest ? ',"test":true' : ''}}\n`;
	};
}

export const FEED_CSV_HEADER = 'kind,tag_id,tag,at,value,unit,quality,quality_name,time_from,test,event\r\n';

/** A feed entry as a CSV line [RFC 4180]; an event's details stand as JSON in the last column. */
export function feedCsvLine(entry: FeedEntryLike, facts: ReadonlyMap<number, FactsLike>): string {
	const item = toFeedItem(entry, facts);
	const cells =
		item.kind === 'reading'
			? [
					item.kind,
					item.tag_id,
					item.tag,
					item.at,
					item.value ?? '',
					item.unit,
					(item as ReadingItem).quality.code,
					(item as ReadingItem).quality.name,
					item.time_from,
					item.test ?? '',
					'',
				]
			: [item.kind, item.tag_id ?? '', item.tag ?? '', item.at, '', '', '', '', '', '', JSON.stringify(item)];
	return `${cells.map((cell) => csvCell(typeof cell === 'string' ? neutralise(cell) : String(cell))).join(',')}\r\n`;
}
