// Edge: collector. LISTEN on a connection of its own. May touch: pool.
import type { Client, Pool } from '#lib/server/db/pool.ts';
import { log } from '#lib/server/log.ts';

const PING_MS = 15_000;
const RETRY_MS = 1_000;

/** Calls `onBell` for every notification of the channels, and after each (re)connect, since a bell may have been missed meanwhile. Answers how to stop. */
export function listenFor(
	pool: Pool,
	channels: readonly string[],
	onBell: (channel: string, payload: string) => void,
): () => void {
	let client: Client | null = null;
	let isStopped = false;
	let timer: NodeJS.Timeout | undefined;
	let ping: NodeJS.Timeout | undefined;
	const again = (broken: Client | null) => {
		if (client === broken) client = null;
		clearInterval(ping);
		broken?.release(true);
		if (!isStopped) timer = setTimeout(() => void connect(), RETRY_MS);
	};
	const connect = async () => {
		let made: Client | null = null;
		try {
			made = await pool.connect();
			if (isStopped) {
				made.release(true);
				return;
			}
			const own = made;
			client = own;
			own.on('notification', ({ channel, payload }) => onBell(channel, payload ?? ''));
			own.once('error', () => client === own && again(own));
			for (const channel of channels) await own.query(`LISTEN ${channel}`);
			for (const channel of channels) onBell(channel, '');
			// A dead socket says nothing by itself.
			ping = setInterval(() => own.query('SELECT 1').catch(() => client === own && again(own)), PING_MS);
		} catch (error) {
			log.debug({ error: (error as Error).message }, 'listening failed and is tried again');
			again(made);
		}
	};
	void connect();
	return () => {
		isStopped = true;
		clearTimeout(timer);
		clearInterval(ping);
		client?.release(true);
		client = null;
	};
}
