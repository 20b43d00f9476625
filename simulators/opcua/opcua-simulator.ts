// Edge: simulators. May touch: node-opcua server. An OPC UA server on 127.0.0.1 whose variables somebody sets.
import { mkdtempSync, rmSync } from 'node:fs';
import { tmpdir } from 'node:os';
import { join } from 'node:path';
import {
	DataType,
	MessageSecurityMode,
	OPCUACertificateManager,
	OPCUAServer,
	SecurityPolicy,
	setDebugLogger,
	setErrorLogger,
	setWarningLogger,
	StatusCodes,
	type UAVariable,
	VariantArrayType,
} from 'node-opcua';
import { CEFACT_NAMESPACE, CEFACT_OF_UCUM, unitIdOf } from '#lib/pipeline/normalize/units/eu-information.ts';

for (const setLogger of [setErrorLogger, setWarningLogger, setDebugLogger]) setLogger(() => undefined);

/** A variable of the server: name, type, and for analog values unit (UCUM) and range. */
export interface VariableSpec {
	name: string;
	dataType?: 'Double' | 'Float' | 'Int16' | 'UInt16' | 'Int32' | 'Boolean' | 'Int64' | 'UInt64' | 'String';
	unit?: string;
	low?: number;
	high?: number;
	value?: number | boolean | string | bigint;
}

export interface OpcuaSimulatorOptions {
	port: number;
	/** Namespace of the variables; node ids are `nsu=NAMESPACE;s=NAME`. */
	namespace: string;
	variables: readonly VariableSpec[];
	/** Longest queue of an item, whatever a client asks for, as small servers have it. */
	longestQueue?: number;
	/** Users that may open a session; anybody without a name unless given. */
	users?: Readonly<Record<string, string>>;
}

export interface OpcuaSimulator {
	readonly port: number;
	readonly endpointUrl: string;
	/** Sets a value with its own status and time; the time is shifted by the clock's offset. */
	set(name: string, value: number | boolean | string | bigint | null, options?: { at?: number; isBad?: boolean }): void;
	/** How far the source's clock is ahead. */
	setClockOffset(ms: number): void;
	/** Ends the server with its sessions and starts it again; without some variables, or with another namespace before its own. */
	restart(change?: { without?: readonly string[]; extraNamespaceFirst?: boolean }): Promise<void>;
	stop(): Promise<void>;
}

/** Starts a server. It is ready when this resolves. */
export async function startOpcuaSimulator(options: OpcuaSimulatorOptions): Promise<OpcuaSimulator> {
	const folder = mkdtempSync(join(tmpdir(), 'millrace-opcua-'));
	let clockOffsetMs = 0;
	let server: OPCUAServer;
	let variables = new Map<string, { node: UAVariable; spec: VariableSpec }>();
	const last = new Map<string, { value: number | boolean | string | bigint | null; at: number; isBad: boolean }>();

	const start = async (change: { without?: readonly string[]; extraNamespaceFirst?: boolean }) => {
		const manager = new OPCUACertificateManager({ rootFolder: join(folder, 'pki'), automaticallyAcceptUnknownCertificate: true });
		await manager.initialize();
		server = new OPCUAServer({
			port: options.port,
			host: '127.0.0.1',
			hostname: '127.0.0.1',
			resourcePath: '',
			buildInfo: { productName: 'Wireless gateway simulator', buildNumber: '1', buildDate: new Date(Date.UTC(2026, 0, 1)) },
			serverCertificateManager: manager,
			allowAnonymous: !options.users,
			userManager: { isValidUser: (name: string, password: string) => options.users?.[name] === password },
			securityModes: [MessageSecurityMode.None, MessageSecurityMode.SignAndEncrypt],
			securityPolicies: [SecurityPolicy.None, SecurityPolicy.Basic256Sha256],
			serverCapabilities: { maxSessions: 20 },
			maxConnectionsPerEndpoint: 40,
		});
		await server.initialize();
		const space = server.engine.addressSpace;
		if (!space) throw new Error('the server has no address space');
		if (change.extraNamespaceFirst) space.registerNamespace('urn:another:namespace');
		const own = space.registerNamespace(options.namespace);
		const root = own.addFolder(space.rootFolder.objects, { browseName: 'Gateway', nodeId: 's=Gateway' });
		variables = new Map();
		for (const spec of options.variables) {
			if (change.without?.includes(spec.name)) continue;
			const dataType = spec.dataType ?? 'Double';
			const common = {
				browseName: spec.name,
				displayName: spec.name,
				nodeId: `s=${spec.name}`,
				componentOf: root,
				dataType,
				minimumSamplingInterval: 10,
			};
			const node =
				spec.low === undefined || spec.high === undefined
					? own.addVariable(common)
					: own.addAnalogDataItem({
							...common,
							engineeringUnitsRange: { low: spec.low, high: spec.high },
							engineeringUnits: {
								namespaceUri: CEFACT_NAMESPACE,
								unitId: unitIdOf(CEFACT_OF_UCUM[spec.unit ?? ''] ?? ''),
								displayName: { text: spec.unit ?? '1' },
								description: { text: spec.unit ?? '1' },
							},
						});
			variables.set(spec.name, { node, spec });
			const known = last.get(spec.name);
			if (known) write(spec.name, known);
			else if (spec.value !== undefined) write(spec.name, { value: spec.value, at: Date.now(), isBad: false });
		}
		const { longestQueue } = options;
		if (longestQueue !== undefined) {
			server.on('session_activated', (session) => {
				session.on('new_subscription', (subscription) => {
					subscription.on('monitoredItem', (item: { queueSize: number }) => {
						item.queueSize = Math.min(item.queueSize, longestQueue);
					});
				});
			});
		}
		await server.start();
	};
	const write = (
		name: string,
		{ value, at, isBad }: { value: number | boolean | string | bigint | null; at: number; isBad: boolean },
	) => {
		last.set(name, { value, at, isBad });
		const found = variables.get(name);
		if (!found) return;
		const dataType = DataType[found.spec.dataType ?? 'Double'];
		// A 64-bit integer goes as [high, low], which alone looks like an array.
		const wire = typeof value === 'bigint' ? [Number((value >> 32n) & 0xffffffffn), Number(value & 0xffffffffn)] : value;
		found.node.setValueFromSource(
			value === null ? { dataType: DataType.Null } : { dataType, arrayType: VariantArrayType.Scalar, value: wire },
			isBad ? StatusCodes.BadSensorFailure : StatusCodes.Good,
			new Date(at + clockOffsetMs),
		);
	};
	await start({});
	return {
		port: options.port,
		endpointUrl: `opc.tcp://127.0.0.1:${options.port}`,
		set: (name, value, { at = Date.now(), isBad = false } = {}) => write(name, { value, at, isBad }),
		setClockOffset: (ms) => {
			clockOffsetMs = ms;
		},
		restart: async (change = {}) => {
			await server.shutdown(0);
			await start(change);
		},
		stop: async () => {
			await server.shutdown(0);
			rmSync(folder, { recursive: true, force: true });
		},
	};
}
