// Edge: collector. May touch: the certificates table and this installation's PKI folder.
import { mkdir, readdir, unlink, writeFile } from 'node:fs/promises';
import { join } from 'node:path';
import type { CertificateFound } from '#lib/pipeline/sources/source.ts';
import type { Pool } from '#lib/server/db/pool.ts';

/** Keeps a server certificate that was met and is not trusted, so that somebody can look at it and decide. */
export async function rememberCertificate(pool: Pool, sourceId: string, found: CertificateFound): Promise<void> {
	await pool.query(
		`INSERT INTO certificates (fingerprint, source_id, subject, issuer, valid_from, valid_to, der) VALUES ($1, $2, $3, $4, $5, $6, $7)
		 ON CONFLICT (fingerprint) DO UPDATE SET source_id = excluded.source_id`,
		[found.fingerprint, sourceId, found.subject, found.issuer, found.validFrom, found.validTo, Buffer.from(found.der)],
	);
}

/** Lays the certificates that people trusted into the folder where OPC UA clients look, and takes the others out. */
export async function syncTrusted(pool: Pool, pkiFolder: string): Promise<void> {
	const folder = join(pkiFolder, 'trusted', 'certs');
	await mkdir(folder, { recursive: true });
	const trusted = await pool.query<{ fingerprint: string; der: Buffer }>(
		"SELECT fingerprint, der FROM certificates WHERE state = 'trusted'",
	);
	const wanted = new Map(trusted.rows.map((row) => [`${row.fingerprint.replaceAll(':', '')}.der`, row.der]));
	const present = new Set(await readdir(folder));
	for (const [name, der] of wanted) if (!present.has(name)) await writeFile(join(folder, name), der);
	for (const name of present) if (name.endsWith('.der') && !wanted.has(name)) await unlink(join(folder, name));
}
