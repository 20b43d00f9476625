// Edge: source setup. May touch: certificates table, audit, NOTIFY. Collectors lay trusted ones into their own folder.
import { ok, refuse, type Outcome } from '#lib/domain/outcome.ts';
import { recordAudit } from '#lib/server/audit/record.ts';
import type { Pool } from '#lib/server/db/pool.ts';
import { inTransaction } from '#lib/server/db/transaction.ts';
import type { Caller } from './save-source.ts';

export interface CertificateShown {
	fingerprint: string;
	subject: string;
	issuer: string;
	validFrom: string | null;
	validTo: string | null;
	state: 'unknown' | 'trusted' | 'rejected';
	decidedBy: string | null;
}

/** Certificates that a source's server has shown. */
export async function listCertificates(pool: Pool, sourceId: string): Promise<CertificateShown[]> {
	const found = await pool.query(
		'SELECT fingerprint, subject, issuer, valid_from, valid_to, state, decided_by FROM certificates WHERE source_id = $1 ORDER BY first_seen_at DESC',
		[sourceId],
	);
	return found.rows.map((row) => ({
		fingerprint: row.fingerprint,
		subject: row.subject,
		issuer: row.issuer,
		validFrom: row.valid_from?.toISOString() ?? null,
		validTo: row.valid_to?.toISOString() ?? null,
		state: row.state,
		decidedBy: row.decided_by,
	}));
}

/** Trusts a certificate that was met, or takes the trust back. Refuses 'not-found'. The source connects anew. */
export async function decideCertificate(
	pool: Pool,
	fingerprint: string,
	state: 'trusted' | 'rejected',
	caller: Caller,
): Promise<Outcome<null, 'not-found'>> {
	return inTransaction(pool, async (db, client) => {
		const before = await client.query<{ state: string; subject: string; source_id: string | null }>(
			'SELECT state, subject, source_id FROM certificates WHERE fingerprint = $1 FOR UPDATE',
			[fingerprint],
		);
		const found = before.rows[0];
		if (!found) return refuse('not-found');
		await client.query('UPDATE certificates SET state = $2, decided_at = now(), decided_by = $3 WHERE fingerprint = $1', [
			fingerprint,
			state,
			caller.actor.name,
		]);
		if (found.source_id) await client.query('UPDATE sources SET version = version + 1 WHERE id = $1', [found.source_id]);
		await recordAudit(db, {
			...caller,
			action: `certificate.${state}`,
			subjectKind: 'certificate',
			subjectId: fingerprint,
			subjectName: found.subject,
			before: { state: found.state },
			after: { state },
		});
		await client.query("SELECT pg_notify('millrace_sources', $1)", [String(caller.siteId)]);
		return ok(null);
	});
}
