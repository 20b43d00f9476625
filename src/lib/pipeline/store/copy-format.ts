// Pure.
import { toStored } from '#lib/domain/quality.ts';
import type { StoredReading } from './write-batch.ts';

/** What makes a reading impossible to store, or null. Year 9999 is far inside PostgreSQL's range and far outside any clock's. */
export function faultOf(reading: StoredReading): string | null {
	if (!Number.isInteger(reading.tagId) || reading.tagId < 1 || reading.tagId > 2_147_483_647) return 'tag-id-out-of-range';
	if (!Number.isSafeInteger(reading.at) || Math.abs(reading.at) > 253_402_300_799_999) return 'time-out-of-range';
	if (reading.value !== null && !Number.isFinite(reading.value)) return 'not-a-number';
	if (reading.rawKept?.includes('\u0000') || reading.reason?.includes('\u0000')) return 'null-character';
	return null;
}

const MOST_BYTES = 64 * 1024;

/** Lines of COPY's text format, handed on in pieces of some 64 kB. */
export function* copyLines(readings: readonly StoredReading[]): Generator<string> {
	let piece = '';
	for (const reading of readings) {
		piece += `${reading.tagId}\t${timeText(reading.at)}\t${reading.value === null ? '\\N' : reading.value}\t${toStored(reading.quality)}\t${timeText(reading.receivedAt)}\t${reading.timeFrom === 'hub' ? 't' : 'f'}\t${reading.revision}\t${reading.sourceAt === null ? '\\N' : sourceText(reading.sourceAt)}\t${reading.reason ?? '\\N'}\t${reading.rawKept === null ? '\\N' : escape(reading.rawKept)}\n`;
		if (piece.length > MOST_BYTES) {
			yield piece;
			piece = '';
		}
	}
	if (piece) yield piece;
}

// Readings of one batch share few instants; formatting them is most of the work otherwise.
let lastMs = Number.NaN;
let lastText = '';

function timeText(ms: number): string {
	if (ms === lastMs) return lastText;
	lastMs = ms;
	lastText = new Date(ms).toISOString();
	return lastText;
}

/** A source's untrusted time may be anything; what no timestamp can hold is left out here and stays in the raw payload. */
function sourceText(ms: number): string {
	return Math.abs(ms) <= 253_402_300_799_999 && ms > -62_135_596_800_000 ? new Date(ms).toISOString() : '\\N';
}

function escape(text: string): string {
	return /[\\\t\n\r]/.test(text)
		? text.replaceAll('\\', '\\\\').replaceAll('\t', '\\t').replaceAll('\n', '\\n').replaceAll('\r', '\\r')
		: text;
}
