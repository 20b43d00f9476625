// Edge: server. Not for the browser. Reads its level before config.ts is loaded, so that a wrong setting can be logged.
import { pino } from 'pino';

/** One JSON line an entry; secrets that could come near a log are cut out by name. */
export const log = pino({
	level: process.env.MILLRACE_LOG || 'info',
	base: { process: process.title },
	redact: ['password', '*.password', 'secrets', '*.secrets', 'authorization', '*.authorization', 'key', '*.key'],
});
