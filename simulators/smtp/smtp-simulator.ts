// Edge: simulators. May touch: protocol servers, domain.
import { SMTPServer } from 'smtp-server';

const MOST_MAILS = 200;

export interface Mail {
	at: string;
	from: string;
	to: string[];
	/** The message as it came over the wire, headers and body. */
	text: string;
}
export interface SmtpSimulator {
	readonly port: number;
	/** The last 200, oldest first. */
	mails(): readonly Mail[];
	/** While set, every message is refused for now (451). */
	refuse(isRefusing: boolean): void;
	stop(): Promise<void>;
}

/** A mail server on 127.0.0.1 that delivers nothing and keeps what it was given. */
export function startSmtpSimulator({ port }: { port: number }): Promise<SmtpSimulator> {
	const mails: Mail[] = [];
	let isRefusing = false;
	const server = new SMTPServer({
		disabledCommands: ['AUTH', 'STARTTLS'],
		logger: false,
		onData(stream, session, callback) {
			const chunks: Buffer[] = [];
			stream.on('data', (chunk: Buffer) => chunks.push(chunk));
			stream.on('end', () => {
				if (isRefusing) {
					callback(Object.assign(new Error('not now'), { responseCode: 451 }));
					return;
				}
				const { mailFrom, rcptTo } = session.envelope;
				mails.push({
					at: new Date().toISOString(),
					from: mailFrom ? mailFrom.address : '',
					to: rcptTo.map((one) => one.address),
					text: Buffer.concat(chunks).toString('utf8'),
				});
				if (mails.length > MOST_MAILS) mails.shift();
				callback();
			});
		},
	});
	server.on('error', () => undefined);
	return new Promise((resolve, reject) => {
		server.server.once('error', reject);
		server.listen(port, '127.0.0.1', () => {
			const address = server.server.address();
			resolve({
				port: address !== null && typeof address === 'object' ? address.port : port,
				mails: () => mails,
				refuse: (yes) => {
					isRefusing = yes;
				},
				stop: () => new Promise<void>((done) => server.close(() => done())),
			});
		});
	});
}
