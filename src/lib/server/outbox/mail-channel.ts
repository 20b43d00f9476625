// Edge: outbox. May touch: outbox table (claimed with skip locked), mail, HTTP out.
import { createTransport } from 'nodemailer';
import { z } from 'zod';
import type { Claimed } from './claim.ts';

const letterSchema = z.object({ subject: z.string(), text: z.string() });

/** Sends one claimed message; rejects when it was not taken. */
export type Channel = { send(message: Claimed): Promise<void>; close(): void };

/** Mail over SMTP. The message id is the outbox row's, so that a letter sent twice is told apart from two letters. */
export function createMailChannel(smtpUrl: string, from: string): Channel {
	const transport = createTransport(
		{ url: smtpUrl, connectionTimeout: 10_000, greetingTimeout: 10_000, socketTimeout: 30_000 },
		{ from },
	);
	return {
		async send(message) {
			const letter = letterSchema.parse(message.payload);
			await transport.sendMail({
				to: { name: '', address: message.target },
				subject: letter.subject,
				text: letter.text,
				messageId: `<outbox-${message.id}@millrace.invalid>`,
				headers: { 'Auto-Submitted': 'auto-generated' },
			});
		},
		close: () => transport.close(),
	};
}
