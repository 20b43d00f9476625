// Edge: sources. May touch: node-opcua. Opens one session, with its own deadline, and knows why it cannot.
import { X509Certificate } from 'node:crypto';
import { mkdirSync, readdirSync, readFileSync } from 'node:fs';
import { join } from 'node:path';
import {
	type ClientSession,
	type EndpointDescription,
	MessageSecurityMode,
	OPCUACertificateManager,
	OPCUAClient,
	type OPCUAClientOptions,
	SecurityPolicy,
	setDebugLogger,
	setErrorLogger,
	setWarningLogger,
	UserTokenType,
	type UserIdentityInfo,
} from 'node-opcua';
import type { OpcuaSettings } from '#lib/domain/source-settings.ts';
import { SourceError, type CertificateFound, type SourceContext } from '../source.ts';
import { adviceOf } from './advice.ts';

// What the library would print is told through advice and events instead.
for (const setLogger of [setErrorLogger, setWarningLogger, setDebugLogger]) setLogger(() => undefined);

/** A connection that is not made by then is given up. */
const CONNECT_MS = 10_000;
const SESSION_MS = 60_000;

export interface OpenSession {
	client: OPCUAClient;
	session: ClientSession;
	namespaces: string[];
	endpoints: EndpointDescription[];
	close(): Promise<void>;
}

/** Rejects after `ms` with words that advice knows. */
export async function within<T>(work: Promise<T>, ms: number, what: string): Promise<T> {
	let timer: NodeJS.Timeout | undefined;
	const late = new Promise<never>((_, reject) => {
		timer = setTimeout(() => reject(new Error(`${what} did not answer within ${Math.round(ms / 1_000)} s`)), ms);
	});
	try {
		return await Promise.race([work, late]);
	} finally {
		clearTimeout(timer);
	}
}

function describe(der: Uint8Array): CertificateFound {
	const certificate = new X509Certificate(der);
	return {
		fingerprint: certificate.fingerprint256,
		subject: certificate.subject.replaceAll('\n', ', '),
		issuer: certificate.issuer.replaceAll('\n', ', '),
		validFrom: new Date(certificate.validFrom).toISOString(),
		validTo: new Date(certificate.validTo).toISOString(),
		der,
	};
}

/** True when somebody trusted this very certificate. */
function isTrusted(pkiFolder: string, der: Uint8Array): boolean {
	const folder = join(pkiFolder, 'trusted', 'certs');
	mkdirSync(folder, { recursive: true });
	return readdirSync(folder).some(
		(name) => name.endsWith('.der') && Buffer.compare(readFileSync(join(folder, name)), Buffer.from(der)) === 0,
	);
}

function clientOptions(context: SourceContext, manager: OPCUACertificateManager): OPCUAClientOptions {
	return {
		applicationName: 'Millrace',
		clientName: `Millrace ${context.installationId.slice(0, 8)}`,
		clientCertificateManager: manager,
		// What a device advertises may lead elsewhere or nowhere: the host that was dialled is kept.
		endpointMustExist: false,
		keepSessionAlive: true,
		requestedSessionTimeout: SESSION_MS,
		// The collector reconnects; a link that heals by itself could come back green and dead.
		connectionStrategy: { maxRetry: 0, initialDelay: 200, maxDelay: 1_000 },
	};
}

/** Endpoints that the server offers, asked without security. */
export async function findEndpoints(settings: OpcuaSettings, context: SourceContext): Promise<EndpointDescription[]> {
	const manager = new OPCUACertificateManager({ rootFolder: context.pkiFolder, automaticallyAcceptUnknownCertificate: false });
	const client = OPCUAClient.create(clientOptions(context, manager));
	try {
		await within(client.connect(settings.endpoint_url), CONNECT_MS, settings.endpoint_url);
		return await within(client.getEndpoints(), CONNECT_MS, settings.endpoint_url);
	} finally {
		await client.disconnect().catch(() => undefined);
	}
}

/** Opens a session. Rejects with a `SourceError`; a server certificate that nobody trusts yet comes with it. */
export async function openSession(settings: OpcuaSettings, context: SourceContext): Promise<OpenSession> {
	const place = settings.endpoint_url;
	const isSecure = settings.security_mode !== 'None';
	let client: OPCUAClient | null = null;
	try {
		const endpoints = await findEndpoints(settings, context);
		const wanted = endpoints.find(
			(endpoint) =>
				endpoint.securityMode === MessageSecurityMode[settings.security_mode] &&
				(endpoint.securityPolicyUri ?? '').endsWith(`#${settings.security_policy}`),
		);
		if (!wanted) throw new Error('no-such-security');
		if (isSecure && wanted.serverCertificate && !isTrusted(context.pkiFolder, wanted.serverCertificate)) {
			const certificate = describe(new Uint8Array(wanted.serverCertificate));
			throw new SourceError(
				{
					code: 'certificate-unknown',
					text: `The certificate of ${place} is not trusted yet.`,
					check: `Compare its fingerprint ${certificate.fingerprint.slice(0, 23)}… with the one the server itself shows, then trust it on the source’s page.`,
				},
				{ certificate },
			);
		}
		const manager = new OPCUACertificateManager({ rootFolder: context.pkiFolder, automaticallyAcceptUnknownCertificate: false });
		client = OPCUAClient.create({
			...clientOptions(context, manager),
			securityMode: MessageSecurityMode[settings.security_mode],
			securityPolicy: SecurityPolicy[settings.security_policy],
			...(isSecure && wanted.serverCertificate ? { serverCertificate: wanted.serverCertificate } : {}),
		});
		await within(client.connect(place), CONNECT_MS, place);
		const identity: UserIdentityInfo = settings.user_name
			? { type: UserTokenType.UserName, userName: settings.user_name, password: settings.password ?? '' }
			: { type: UserTokenType.Anonymous };
		const session = await within(client.createSession(identity), CONNECT_MS, place);
		const namespaces = await within(session.readNamespaceArray(), CONNECT_MS, place);
		const open = client;
		return {
			client,
			session,
			namespaces,
			endpoints,
			close: async () => {
				await within(session.close(true), 3_000, place).catch(() => undefined);
				await within(open.disconnect(), 3_000, place).catch(() => undefined);
			},
		};
	} catch (error) {
		void client?.disconnect().catch(() => undefined);
		if (error instanceof SourceError) throw error;
		throw new SourceError(adviceOf((error as Error).message, place), { cause: error });
	}
}
