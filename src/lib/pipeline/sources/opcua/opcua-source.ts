// Edge: sources. May touch: node-opcua. Not: database, tag map, scaling.
import type { OpcuaSettings } from '#lib/domain/source-settings.ts';
import type { Advice, Emit, Source, SourceContext, SourceLink, TestReport, TestStep, WantedAddress } from '../source.ts';
import { SourceError } from '../source.ts';
import { adviceOf, skewWords } from './advice.ts';
import { browseNode } from './browse.ts';
import { MonitoredItems } from './monitored-items.ts';
import { Outgoing } from './outgoing.ts';
import { refusalAdvice } from './refusal-advice.ts';
import { readSkew } from './server-clock.ts';
import { openSession, within, type OpenSession } from './session.ts';
import { testServer } from './test-server.ts';

/** Constant values are confirmed this often while the server lives. */
const CONFIRM_MS = 3_000;
/** Nodes that are refused are asked for again this rarely. */
const REFUSED_RETRY_MS = 60_000;
const SKEW_MS = 60_000;

/** Reads an OPC UA server by subscription. */
export function createOpcuaSource(settings: OpcuaSettings, context: SourceContext): Source {
	return {
		async open(emit, signal) {
			const opening = openSession(settings, context);
			// A stop does not wait for a server that is slow to answer; what opens after it is closed again.
			const aborted = new Promise<never>((_, reject) => {
				const stop = () => reject(new SourceError(adviceOf('closed', settings.endpoint_url)));
				if (signal.aborted) stop();
				else signal.addEventListener('abort', stop, { once: true });
			});
			aborted.catch(() => undefined);
			let open: OpenSession;
			try {
				open = await Promise.race([opening, aborted]);
			} catch (error) {
				opening.then((late) => late.close()).catch(() => undefined);
				throw error;
			}
			return new OpcuaLink(settings, context, open, emit, signal);
		},
		test: () => testServer(settings, context),
		async browse(node) {
			const open = await openSession(settings, context);
			try {
				return await browseNode(open.session, open.namespaces, node);
			} finally {
				await open.close();
			}
		},
	};
}

/** The life of one session: it is watched, and what ends it ends the link. */
class OpcuaLink implements SourceLink {
	readonly closed: Promise<void>;
	readonly #settings: OpcuaSettings;
	readonly #context: SourceContext;
	readonly #open: OpenSession;
	readonly #items: MonitoredItems;
	readonly #outgoing: Outgoing;
	readonly #timers: NodeJS.Timeout[] = [];
	#isEnded = false;
	#settle: { resolve(): void; reject(error: Error): void } = { resolve: () => undefined, reject: () => undefined };

	constructor(settings: OpcuaSettings, context: SourceContext, open: OpenSession, emit: Emit, signal: AbortSignal) {
		this.#settings = settings;
		this.#context = context;
		this.#open = open;
		this.#outgoing = new Outgoing(emit);
		this.#items = new MonitoredItems(settings, context, open, {
			heard: () => context.observer.request(true, 0),
			hand: (sample) => this.#outgoing.hand(sample),
			ended: (why) => this.#lost(why),
			now: () => context.now(),
		});
		this.closed = new Promise<void>((resolve, reject) => (this.#settle = { resolve, reject }));
		this.closed.catch(() => undefined);
		for (const event of ['connection_lost', 'close', 'abort'] as const)
			open.client.on(event, () => this.#lost('the connection was lost'));
		open.session.on('session_closed', () => this.#lost('the session was closed'));
		open.session.on('keepalive_failure', () => this.#lost('the session was lost'));
		signal.addEventListener('abort', () => void this.#end(), { once: true });
		this.#every(1_000, () => this.#watch());
		this.#every(CONFIRM_MS, () => this.#items.lane?.confirmWhileAlive());
		this.#every(REFUSED_RETRY_MS, () => this.#retryRefused());
		this.#every(SKEW_MS, () => void this.#readSkew());
		void this.#readSkew();
		if (signal.aborted) void this.#end();
	}

	/** What is wrong with single nodes while the session stands. */
	get advice(): Advice | null {
		return refusalAdvice(this.#items.faults, this.#items.size);
	}

	setAddresses(wanted: readonly WantedAddress[]) {
		return this.#items.want(wanted);
	}

	browse(node: string | null) {
		return browseNode(this.#open.session, this.#open.namespaces, node);
	}

	async test(): Promise<TestReport> {
		const begun = performance.now();
		let skew: number | null;
		try {
			skew = await within(readSkew(this.#open, this.#context), 5_000, this.#settings.endpoint_url);
		} catch (error) {
			const advice = adviceOf((error as Error).message, this.#settings.endpoint_url);
			return { ok: false, steps: [{ name: 'Session', ok: false, detail: advice.text }], advice };
		}
		const refused = this.#items.faults.length;
		const steps: TestStep[] = [
			{
				name: 'Session',
				ok: true,
				detail: `stands, answers in ${Math.round(performance.now() - begun)} ms`,
				ms: Math.round(performance.now() - begun),
			},
			{
				name: 'Nodes',
				ok: refused === 0,
				detail: refused === 0 ? `all ${this.#items.size} are there` : `${refused} of ${this.#items.size} cannot be read`,
			},
		];
		if (skew !== null)
			steps.push({ name: 'Clock', ok: skewWords(skew) === null, detail: skewWords(skew) ?? 'in step with ours' });
		return { ok: steps.every((step) => step.ok), steps, advice: this.advice };
	}

	#every(ms: number, work: () => void): void {
		this.#timers.push(setInterval(work, ms));
	}

	#watch(): void {
		const why = this.#items.lane?.whyLost();
		if (why) this.#lost(why);
	}

	#retryRefused(): void {
		this.#items.retryRefused().catch((error: Error) => this.#lost(error.message));
	}

	async #readSkew(): Promise<void> {
		try {
			const skew = await readSkew(this.#open, this.#context);
			if (skew === null) return;
			this.#context.observer.clockSkew(skew);
			const words = skewWords(skew);
			if (words) this.#context.observer.event('warning', 'clock-skew', words);
		} catch {
			// The watch tells of a server that does not answer.
		}
	}

	#lost(why: string): void {
		if (this.#isEnded) return;
		this.#isEnded = true;
		for (const timer of this.#timers) clearInterval(timer);
		this.#outgoing.flush();
		this.#settle.reject(new SourceError(adviceOf(why, this.#settings.endpoint_url), { cause: new Error(why) }));
		void this.#open.close().catch(() => undefined);
	}

	async #end(): Promise<void> {
		if (this.#isEnded) return;
		this.#isEnded = true;
		for (const timer of this.#timers) clearInterval(timer);
		await this.#open.close().catch(() => undefined);
		// Everything taken is handed over before the link counts as closed.
		await this.#outgoing.settled();
		this.#settle.resolve();
	}
}
