import { SMTPServer } from 'smtp-server';
import { afterAll, beforeAll, expect, it } from 'vitest';
import { createDb, createPool, type Pool } from '#lib/server/db/pool.ts';
import { inTransaction } from '#lib/server/db/transaction.ts';
import { claimDue } from '#lib/server/outbox/claim.ts';
import { startOutbox } from '#lib/server/outbox/deliver.ts';
import { enqueueMail } from '#lib/server/outbox/enqueue.ts';
import { cloneDatabase, freePort } from '../support/cluster.ts';

let pool: Pool;
let database: Awaited<ReturnType<typeof cloneDatabase>>;
let server: SMTPServer;
let config: { smtpUrl: string; mailFrom: string };
const letters: { to: string; text: string }[] = [];
/** While set, the mail server refuses every recipient. */
let isRefusing = false;

beforeAll(async () => {
	database = await cloneDatabase();
	pool = createPool(database.url, { name: 'test', max: 5 });
	const port = await freePort();
	server = new SMTPServer({
		authOptional: true,
		disabledCommands: ['STARTTLS'],
		onRcptTo: (_address, _session, done) => done(isRefusing ? new Error('not just now') : null),
		onData(stream, session, done) {
			let text = '';
			stream.on('data', (chunk: Buffer) => (text += chunk.toString()));
			stream.on('end', () => {
				letters.push({ to: session.envelope.rcptTo[0]?.address ?? '', text });
				done();
			});
		},
	});
	await new Promise<void>((resolve) => server.listen(port, '127.0.0.1', () => resolve()));
	config = { smtpUrl: `smtp://127.0.0.1:${port}`, mailFrom: 'Millrace <millrace@example.org>' };
});
afterAll(async () => {
	await pool.end();
	await new Promise<void>((resolve) => server.close(() => resolve()));
	await database.drop();
});

async function until(holds: () => Promise<boolean> | boolean): Promise<void> {
	for (let tries = 0; tries < 200; tries += 1) {
		if (await holds()) return;
		await new Promise((resolve) => setTimeout(resolve, 25));
	}
	throw new Error('it did not come to that within five seconds');
}
const waiting = async () =>
	(await pool.query("SELECT count(*)::int AS n FROM outbox WHERE state = 'waiting'")).rows[0].n as number;

it('two processes side by side send each letter once, and the text with its link is gone afterwards', async () => {
	for (let n = 0; n < 30; n += 1)
		await enqueueMail(createDb(pool), `p${n}@example.org`, { subject: 'Hello', text: 'https://here/invite/secret' });
	const both = [startOutbox(pool, config, 20), startOutbox(pool, config, 20)];
	await until(async () => (await waiting()) === 0);
	await Promise.all(both.map((one) => one.stop()));
	expect(letters.map(({ to }) => to).sort()).toEqual(Array.from({ length: 30 }, (_, n) => `p${n}@example.org`).sort());
	expect(letters[0]?.text).toContain('https://here/invite/secret');
	const { rows } = await pool.query('SELECT payload::text AS payload, state FROM outbox');
	for (const row of rows) expect(row).toEqual({ payload: '{"subject": "Hello"}', state: 'sent' });
});

it('a letter that is refused is tried again later, with what the mail server said', async () => {
	isRefusing = true;
	await enqueueMail(createDb(pool), 'later@example.org', { subject: 'Hello', text: 'x' });
	const outbox = startOutbox(pool, config, 20);
	const row = async () =>
		(await pool.query("SELECT *, next_at > now() AS is_later FROM outbox WHERE target = 'later@example.org'")).rows[0];
	await until(async () => (await row()).last_error !== null);
	expect(await row()).toMatchObject({
		state: 'waiting',
		attempts: 1,
		is_later: true,
		last_error: expect.stringContaining('not just now'),
	});
	isRefusing = false;
	await pool.query('UPDATE outbox SET next_at = now()');
	await until(async () => (await row()).state === 'sent');
	await outbox.stop();
	expect(await row()).toMatchObject({ attempts: 2, last_error: null });
});

it('a letter of a transaction that was rolled back is never sent', async () => {
	const undone = inTransaction(pool, async (db) => {
		await enqueueMail(db, 'never@example.org', { subject: 'Hello', text: 'x' });
		throw new Error('undone');
	});
	await expect(undone).rejects.toThrow('undone');
	expect(await waiting()).toBe(0);
});

it('what a dead process had claimed comes up again', async () => {
	await enqueueMail(createDb(pool), 'claimed@example.org', { subject: 'Hello', text: 'x' });
	expect(await claimDue(pool, ['mail'], 10)).toHaveLength(1);
	expect(await claimDue(pool, ['mail'], 10)).toHaveLength(0);
	await pool.query("UPDATE outbox SET next_at = now() - interval '1 second' WHERE state = 'waiting'");
	expect(await claimDue(pool, ['mail'], 10)).toMatchObject([{ target: 'claimed@example.org', attempts: 2 }]);
});
