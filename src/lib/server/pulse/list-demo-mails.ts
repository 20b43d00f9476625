// Edge: pulse. May touch: the demo's control port over HTTP.
import { readConfig } from '#lib/server/config.ts';

/** A letter that the demo's mail receiver took; nothing leaves this machine. */
export interface DemoMail {
	at: string | null;
	from: string;
	to: string;
	subject: string;
	text: string;
}

const asText = (value: unknown): string =>
	Array.isArray(value) ? value.map(asText).join(', ') : value == null ? '' : String(value);

/** Letters of the demo's mail receiver, newest first; null where the simulators do not run. */
export async function listDemoMails(): Promise<DemoMail[] | null> {
	const { simulators } = readConfig();
	try {
		const response = await fetch(`http://127.0.0.1:${simulators.control}/mails`, { signal: AbortSignal.timeout(2_000) });
		if (!response.ok) return null;
		const answer = (await response.json()) as { items?: Record<string, unknown>[] } | Record<string, unknown>[];
		const items = Array.isArray(answer) ? answer : (answer.items ?? []);
		return items
			.map((item) => ({
				at: asText(item.at ?? item.received_at) || null,
				from: asText(item.from),
				to: asText(item.to),
				subject: asText(item.subject),
				text: asText(item.text),
			}))
			.sort((a, b) => (b.at ?? '').localeCompare(a.at ?? ''));
	} catch {
		// The simulators are off or still starting: the page says so.
		return null;
	}
}
