// Edge: database. May touch: pg, drizzle.
import { drizzle } from 'drizzle-orm/node-postgres';
import { migrate } from 'drizzle-orm/node-postgres/migrator';
import pg from 'pg';

/** Any number that nothing else in the database uses. */
const MIGRATION_LOCK = 7_261_403;

/** Brings a database to the newest schema. Processes that start together take turns by an advisory lock. Needs the owner's address. */
export async function migrateDatabase(ownerUrl: string, folder: string): Promise<void> {
	const client = new pg.Client({
		connectionString: ownerUrl,
		application_name: 'millrace migrate',
		connectionTimeoutMillis: 10_000,
	});
	await client.connect();
	try {
		await client.query('SELECT pg_advisory_lock($1)', [MIGRATION_LOCK]);
		await migrate(drizzle(client), { migrationsFolder: folder });
	} finally {
		await client.end();
	}
}
