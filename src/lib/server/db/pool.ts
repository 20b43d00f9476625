// Edge: database. May touch: pg, drizzle. Nobody else opens a connection.
import { drizzle, type NodePgDatabase } from 'drizzle-orm/node-postgres';
import pg from 'pg';
import { log } from '../log.ts';

export type Client = pg.PoolClient;
export type Pool = pg.Pool;
/** Drizzle over the pool or over one transaction's client. */
export type Db = NodePgDatabase;

// int8 as number: ids and positions stay far below 2^53; values never pass through int8.
pg.types.setTypeParser(20, (text) => Number(text));

export interface PoolOptions {
	/** Shown in pg_stat_activity. */
	name: string;
	max: number;
	/** Milliseconds a statement may run; 0 for no bound (COPY of a back-fill). */
	statementTimeoutMs?: number;
}

/**
 * A pool that runs as the application's role, in UTC, with bounds on waiting.
 * A broken idle client is logged, never an uncaught error.
 */
export function createPool(url: string, options: PoolOptions): Pool {
	const pool = new pg.Pool({
		connectionString: url,
		max: options.max,
		application_name: options.name,
		connectionTimeoutMillis: 5_000,
		idleTimeoutMillis: 30_000,
		keepAlive: true,
		options: [
			'-c role=millrace_app',
			'-c timezone=UTC',
			`-c statement_timeout=${options.statementTimeoutMs ?? 30_000}`,
			'-c idle_in_transaction_session_timeout=60000',
			'-c lock_timeout=10000',
		].join(' '),
	});
	pool.on('error', (error) => log.warn({ error: error.message, pool: options.name }, 'an idle database connection was lost'));
	// A checked-out client whose server goes away emits too; without a listener that ends the process.
	pool.on('connect', (client) => {
		client.on('error', (error) => log.warn({ error: error.message, pool: options.name }, 'a database connection was lost'));
	});
	return pool;
}

/** Drizzle's query builder over a pool or client. */
export function createDb(client: Pool | Client): Db {
	return drizzle(client);
}
