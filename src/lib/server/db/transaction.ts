// Edge: database. May touch: pg, drizzle.
import { createDb, type Client, type Db, type Pool } from './pool.ts';

/**
 * Runs `work` in one transaction: commits its answer, rolls back and rethrows on any error.
 * A client whose connection broke is discarded, never given back to the pool.
 */
export async function inTransaction<T>(pool: Pool, work: (db: Db, client: Client) => Promise<T>): Promise<T> {
	const client = await pool.connect();
	let broken: Error | undefined;
	try {
		await client.query('BEGIN');
		const answer = await work(createDb(client), client);
		await client.query('COMMIT');
		return answer;
	} catch (error) {
		try {
			await client.query('ROLLBACK');
		} catch (rollbackError) {
			broken = rollbackError as Error;
		}
		throw error;
	} finally {
		client.release(broken);
	}
}
