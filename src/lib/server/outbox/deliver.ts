// Edge: outbox. May touch: outbox table (claimed with skip locked), mail, HTTP out.
import type { Config } from '#lib/server/config.ts';
import type { Pool } from '#lib/server/db/pool.ts';
import { log } from '#lib/server/log.ts';
import { claimDue, type Claimed } from './claim.ts';
import { createMailChannel, type Channel } from './mail-channel.ts';
import { MOST_ATTEMPTS, retryDelayS } from './retry-delay.ts';

const BATCH = 20;

export interface Outbox {
	/** Ends after the message in hand. */
	stop(): Promise<void>;
}

/**
 * Sends what is due, at least once, looking once a second. Any number of processes may run it side by side.
 * Without a mail server set, letters wait: they go out when there is one.
 */
export function startOutbox(pool: Pool, config: Pick<Config, 'smtpUrl' | 'mailFrom'>, everyMs = 1_000): Outbox {
	const channels = new Map<string, Channel>();
	if (config.smtpUrl) channels.set('mail', createMailChannel(config.smtpUrl, config.mailFrom));
	let stopped = false;
	let wake = (): void => undefined;
	let isFailing = false;

	const run = async (): Promise<void> => {
		while (!stopped) {
			let sent = 0;
			try {
				sent = await deliverDue(pool, channels, () => stopped);
				isFailing = false;
			} catch (error) {
				// Told once per change of state: without the database this loop would say it every second.
				if (!isFailing) log.warn({ err: error }, 'the outbox could not be read');
				isFailing = true;
			}
			if (stopped || sent === BATCH) continue;
			await new Promise<void>((resolve) => {
				const timer = setTimeout(resolve, everyMs);
				wake = () => {
					clearTimeout(timer);
					resolve();
				};
			});
		}
	};
	const running = channels.size > 0 ? run() : Promise.resolve();
	return {
		async stop() {
			stopped = true;
			wake();
			await running;
			for (const channel of channels.values()) channel.close();
		},
	};
}

/** One round: claims what is due and sends it, one after another. Answers how many it took. */
async function deliverDue(pool: Pool, channels: ReadonlyMap<string, Channel>, isStopped: () => boolean): Promise<number> {
	const messages = await claimDue(pool, [...channels.keys()], BATCH);
	for (const message of messages) {
		if (isStopped()) await giveBack(pool, message);
		else await deliverOne(pool, channels.get(message.channel), message);
	}
	return messages.length;
}

async function giveBack(pool: Pool, message: Claimed): Promise<void> {
	await pool.query('UPDATE outbox SET attempts = attempts - 1, next_at = now() WHERE id = $1', [message.id]);
}

async function deliverOne(pool: Pool, channel: Channel | undefined, message: Claimed): Promise<void> {
	try {
		if (!channel) throw new Error(`no channel for ${message.channel}`);
		await channel.send(message);
	} catch (error) {
		const text = (error as Error).message.slice(0, 500);
		const isOver = message.attempts >= MOST_ATTEMPTS;
		log.warn(
			{ outbox: message.id, channel: message.channel, attempts: message.attempts, error: text },
			'a message could not be sent',
		);
		await pool.query(`UPDATE outbox SET state = $2, last_error = $3, next_at = now() + make_interval(secs => $4) WHERE id = $1`, [
			message.id,
			isOver ? 'failed' : 'waiting',
			text,
			retryDelayS(message.attempts, Math.random()),
		]);
		return;
	}
	// The text goes once it is sent: letters carry single-use links, which are stored nowhere else.
	await pool.query(
		`UPDATE outbox SET state = 'sent', sent_at = now(), last_error = NULL,
		 payload = CASE WHEN channel = 'mail' THEN jsonb_build_object('subject', payload->'subject') ELSE payload END WHERE id = $1`,
		[message.id],
	);
}
