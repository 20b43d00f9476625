// Edge: outbox. May touch: outbox table (claimed with skip locked), mail, HTTP out.
import type { Db } from '#lib/server/db/pool.ts';
import { outbox } from '#lib/server/db/schema/audit.ts';

/** A letter: plain text, one recipient. */
export interface Letter {
	subject: string;
	text: string;
}

/** Puts a letter into the outbox, in the caller's transaction: it is sent only if what it tells of was committed. */
export async function enqueueMail(db: Db, to: string, letter: Letter): Promise<void> {
	await db.insert(outbox).values({ channel: 'mail', target: to, payload: { ...letter } });
}
