// Edge: source setup. Opens one source briefly, or asks the collector that runs it; never reads on a schedule.
import { randomUUID } from 'node:crypto';
import { join } from 'node:path';
import type { SourceInput } from '#lib/domain/source-settings.ts';
import { createSource } from '#lib/pipeline/sources/create-source.ts';
import type { Advice, BrowseItem, CertificateFound, Source, SourceObserver, TestReport } from '#lib/pipeline/sources/source.ts';
import { readConfig } from '#lib/server/config.ts';
import type { Pool } from '#lib/server/db/pool.ts';
import { askCollector } from './ask-collector.ts';
import type { SourceRow } from './source-record.ts';

/** A test may take this long; then it says so. */
const LIMIT_MS = 15_000;

const SILENT: SourceObserver = {
	event: () => undefined,
	exchange: () => undefined,
	request: () => undefined,
	clockSkew: () => undefined,
};

/** A report as answers show it: a certificate by its facts, its bytes kept for trusting. */
export type ShownReport = Omit<TestReport, 'certificate'> & { certificate?: Omit<CertificateFound, 'der'> };

async function briefSource(pool: Pool, kind: SourceInput['kind'], settings: Record<string, unknown>): Promise<Source> {
	const found = await pool.query<{ uid: string }>('SELECT uid FROM installation');
	return createSource(
		// A random id: a test must never take over the session of the source that runs.
		{ id: randomUUID(), kind, settings },
		{
			observer: SILENT,
			pkiFolder: join(readConfig().dataFolder, 'pki'),
			installationId: found.rows[0]?.uid ?? 'test',
			now: () => Date.now(),
		},
	);
}

/** Tests settings that are not saved. Never throws for what the device does; the report says it. */
export async function testSettings(pool: Pool, input: Pick<SourceInput, 'kind' | 'settings'>): Promise<ShownReport> {
	const source = await briefSource(pool, input.kind, input.settings);
	return shown(pool, null, await source.test(AbortSignal.timeout(LIMIT_MS)));
}

/** Tests a saved source: over its own connection where a collector runs it, else briefly from here. */
export async function testSource(pool: Pool, row: SourceRow): Promise<ShownReport> {
	const asked = await askCollector(pool, row.id, 'test', {});
	if (asked.isRunning) {
		if ('report' in asked.answer) return shown(pool, row.id, asked.answer.report as TestReport);
		return failed(String(asked.answer.error ?? 'The collector gave no answer.'));
	}
	const source = await briefSource(pool, row.kind, { ...row.settings, ...row.secrets });
	return shown(pool, row.id, await source.test(AbortSignal.timeout(LIMIT_MS)));
}

/** Children of a node. Answers null where the kind cannot be looked through; throws with the device's reason. */
export async function browseSource(pool: Pool, row: SourceRow, node: string | null): Promise<BrowseItem[] | null> {
	const asked = await askCollector(pool, row.id, 'browse', { node });
	if (asked.isRunning) {
		if ('items' in asked.answer) return asked.answer.items as BrowseItem[];
		throw new Error(String(asked.answer.error ?? 'The collector gave no answer.'));
	}
	const source = await briefSource(pool, row.kind, { ...row.settings, ...row.secrets });
	return source.browse ? source.browse(node, AbortSignal.timeout(LIMIT_MS)) : null;
}

function failed(text: string): ShownReport {
	const advice: Advice = {
		code: 'no-answer-from-collector',
		text,
		check: 'Try again in a few seconds; if it stays so, restart the collector.',
	};
	return { ok: false, steps: [{ name: 'Collector', ok: false, detail: text }], advice };
}

/** Keeps a certificate that was met, so that it can be trusted, and leaves its bytes out of the answer. */
async function shown(pool: Pool, sourceId: string | null, report: TestReport): Promise<ShownReport> {
	const { certificate, ...rest } = report;
	if (!certificate) return rest;
	const { der, ...facts } = certificate;
	const bytes = typeof der === 'string' ? Buffer.from(der as string, 'base64') : Buffer.from(der);
	await pool.query(
		`INSERT INTO certificates (fingerprint, source_id, subject, issuer, valid_from, valid_to, der) VALUES ($1, $2, $3, $4, $5, $6, $7)
		 ON CONFLICT (fingerprint) DO UPDATE SET source_id = coalesce(excluded.source_id, certificates.source_id)`,
		[facts.fingerprint, sourceId, facts.subject, facts.issuer, facts.validFrom, facts.validTo, bytes],
	);
	return { ...rest, certificate: facts };
}
