// Edge: sources. May touch: node-opcua. The named steps of a test before saving, on a session of its own.
import type { OpcuaSettings } from '#lib/domain/source-settings.ts';
import { SourceError, type SourceContext, type TestReport, type TestStep } from '../source.ts';
import { adviceOf, skewWords } from './advice.ts';
import { readSkew } from './server-clock.ts';
import { findEndpoints, openSession } from './session.ts';

/** Connects, lists what is offered, opens a session and looks at the clock. Never throws. */
export async function testServer(settings: OpcuaSettings, context: SourceContext): Promise<TestReport> {
	const steps: TestStep[] = [];
	const begun = performance.now();
	try {
		const endpoints = await findEndpoints(settings, context);
		steps.push({
			name: 'Connection',
			ok: true,
			detail: `${settings.endpoint_url} answers`,
			ms: Math.round(performance.now() - begun),
		});
		const offered = [
			...new Set(
				endpoints.map(
					(endpoint) =>
						`${['Invalid', 'None', 'Sign', 'SignAndEncrypt'][endpoint.securityMode] ?? '?'} ${(endpoint.securityPolicyUri ?? '').split('#')[1] ?? ''}`,
				),
			),
		];
		steps.push({ name: 'Security offered', ok: true, detail: offered.join('; ') });
		const other = endpoints
			.map((endpoint) => endpoint.endpointUrl ?? '')
			.find((url) => url !== '' && hostOf(url) !== hostOf(settings.endpoint_url));
		if (other)
			steps.push({
				name: 'Advertised address',
				ok: true,
				detail: `the server calls itself ${other}; ${settings.endpoint_url} is kept`,
			});
	} catch (error) {
		const advice = adviceOf((error as Error).message, settings.endpoint_url);
		steps.push({ name: 'Connection', ok: false, detail: advice.text });
		return { ok: false, steps, advice };
	}
	try {
		const open = await openSession(settings, context);
		steps.push({
			name: 'Session',
			ok: true,
			detail: settings.user_name ? `opened as ${settings.user_name}` : 'opened without a user name',
		});
		const skew = await readSkew(open, context);
		if (skew !== null)
			steps.push({
				name: 'Clock',
				ok: skewWords(skew) === null,
				detail: skewWords(skew) ?? `within ${Math.max(1, Math.ceil(Math.abs(skew) / 1_000))} s of ours`,
			});
		steps.push({ name: 'Namespaces', ok: true, detail: open.namespaces.slice(1).join('; ') || 'only the standard one' });
		await open.close();
		return { ok: true, steps, advice: null };
	} catch (error) {
		const failure =
			error instanceof SourceError ? error : new SourceError(adviceOf((error as Error).message, settings.endpoint_url));
		steps.push({ name: 'Session', ok: false, detail: failure.advice.text });
		return { ok: false, steps, advice: failure.advice, ...(failure.certificate ? { certificate: failure.certificate } : {}) };
	}
}

function hostOf(url: string): string {
	return /^opc\.tcp:\/\/([^/]+)/.exec(url)?.[1]?.toLowerCase() ?? url;
}
