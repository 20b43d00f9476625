// Edge: database. May touch: pg, drizzle. The web process's one pool; the collector makes its own.
import { readConfig } from '../config.ts';
import { createDb, createPool, type Db, type Pool } from './pool.ts';

let pool: Pool | undefined;
let db: Db | undefined;

/** The web process's pool, opened on first use. Throws where DATABASE_URL is missing. */
export function webPool(): Pool {
	if (!pool) {
		const { databaseUrl } = readConfig();
		if (!databaseUrl)
			throw new Error('DATABASE_URL is not set: start with `npm start`, or give the address of a PostgreSQL database');
		pool = createPool(databaseUrl, { name: 'millrace-web', max: 20 });
	}
	return pool;
}

/** Drizzle over the web process's pool. */
export function webDb(): Db {
	db ??= createDb(webPool());
	return db;
}

/** Closes the pool; the last act of a stop. */
export async function closeWebPool(): Promise<void> {
	const open = pool;
	pool = undefined;
	db = undefined;
	await open?.end();
}
