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

/** A feed's readings as NDJSON text, and its events. */
export interface FeedLines {
	reading(
		tagId: number,
		at: number,
		value: number | null,
		quality: number,
		flags: { isHubTime: boolean; isTest: boolean },
	): string;
	event(event: Extract<FeedEntryLike, { kind: 'event' }>['event']): string;
}

/** Two and three digits of clock, made once. */
const SECONDS = Array.from({ length: 60 }, (_, s) => String(s).padStart(2, '0'));
const MILLISECONDS = Array.from({ length: 1_000 }, (_, ms) => `.${String(ms).padStart(3, '0')}Z","value":`);
const MINUTE_MS = 60_000;

/**
 * Writes NDJSON lines; what repeats is made once: the tag's part a tag, the end of the line a tag and quality, the time's a minute.
 * The lines are those of `JSON.stringify(toFeedItem(…))`.
 */
export function createFeedLines(facts: ReadonlyMap<number, FactsLike>): FeedLines {
	interface Parts {
		head: string;
		tails: Map<number, string>;
		quality: number;
		tail: string;
	}
	const tags = new Map<number, Parts>();
	let minute = Number.NaN;
	let minuteText = '';
	const tailOf = (tagId: number, quality: number, isHubTime: boolean, isTest: boolean) =>
		`,"unit":${JSON.stringify(facts.get(tagId)?.unit ?? '')},"quality":${JSON.stringify(qualityJson(quality))},"time_from":${isHubTime ? '"hub"' : '"source"'}${isTest ? ',"test":true' : ''}}\n`;
	return {
		reading(tagId, at, value, quality, { isHubTime, isTest }) {
			let tag = tags.get(tagId);
			if (!tag) {
				const name = JSON.stringify(facts.get(tagId)?.name ?? '');
				tag = {
					head: `{"kind":"reading","tag_id":${tagId},"tag":${name},"at":"`,
					tails: new Map(),
					quality: Number.NaN,
					tail: '',
				};
				tags.set(tagId, tag);
			}
			// A StatusCode is below 2^32, so the two flags stand above it.
			const key = quality + (isHubTime ? 2 ** 32 : 0) + (isTest ? 2 ** 33 : 0);
			if (tag.quality !== key) {
				tag.quality = key;
				tag.tail = tag.tails.get(key) ?? tailOf(tagId, quality, isHubTime, isTest);
				tag.tails.set(key, tag.tail);
			}
			const begin = Math.floor(at / MINUTE_MS) * MINUTE_MS;
			if (begin !== minute) {
				minute = begin;
				minuteText = new Date(begin).toISOString().slice(0, -7);
			}
			const ms = at - begin;
			const second = Math.floor(ms / 1_000);
			return `${tag.head}${minuteText}${SECONDS[second]}${MILLISECONDS[ms - second * 1_000]}${value === null ? 'null' : String(value)}${tag.tail}`;
		},
		event: (event) => `${JSON.stringify(toFeedItem({ kind: 'event', event }, facts))}\n`,
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
