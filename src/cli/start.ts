// Edge: cli. May touch: child processes, the data folder, migrations. `npm start` after the bootstrap: database, processes, one address.
import { spawn } from 'node:child_process';
import { existsSync, mkdirSync, readFileSync, rmSync, writeFileSync } from 'node:fs';
import { createServer } from 'node:net';
import { join } from 'node:path';
import { type Config, readConfig } from '#lib/server/config.ts';
import { migrateDatabase } from '#lib/server/db/migrate.ts';
import { Refusal } from './bootstrap.js';
import { type Kept, keepRunning } from './child.ts';
import { prepareCluster, prepareDatabase, requireDatabase } from './cluster.ts';
import { demoState, layDemo } from './lay-demo.ts';

interface StartOptions {
	demo: boolean;
	/** Folder of the build to serve; null serves the sources with live reload. */
	build: string | null;
}

/** Signals within this time count as one: a terminal sends Ctrl-C to the whole group, and npm passes it on once more. */
const ONE_SIGNAL_MS = 1_000;

/** True when nothing listens there. */
async function isFree(host: string, port: number): Promise<boolean> {
	return new Promise((resolve) => {
		const server = createServer();
		server.once('error', () => resolve(false));
		server.listen(port, host, () => server.close(() => resolve(true)));
	});
}

async function requireFree(host: string, port: number, what: string, setting: string): Promise<void> {
	if (!(await isFree(host, port))) {
		throw new Refusal(`Port ${port} for ${what} is taken on ${host}: end what listens there, or set ${setting} to another port.`);
	}
}

/** Ends processes that an earlier, killed start of this data folder left behind; known by id and name. */
async function endStrays(file: string): Promise<void> {
	if (!existsSync(file)) return;
	const known = JSON.parse(readFileSync(file, 'utf8')) as Record<string, number>;
	for (const pid of Object.values(known)) {
		const isOurs = () => {
			try {
				return /millrace|vite|src\/cli\/start/.test(readFileSync(`/proc/${pid}/cmdline`, 'utf8'));
			} catch {
				return false;
			}
		};
		if (pid === process.pid || !isOurs()) continue;
		if (known.start === pid)
			throw new Refusal(
				`Millrace is already running on this data folder (process ${pid}): stop it first, or set MILLRACE_DATA to another folder.`,
			);
		process.kill(pid, 'SIGTERM');
		for (let waited = 0; waited < 100 && isOurs(); waited += 1) await new Promise((resolve) => setTimeout(resolve, 100));
	}
	rmSync(file, { force: true });
}

function settingsOrRefusal(): Config {
	try {
		return readConfig();
	} catch (error) {
		throw new Refusal((error as Error).message);
	}
}

/** Starts everything, prints the address, and stays until a signal ends it. Throws a `Refusal` when something is the user's to mend. */
export async function start({ demo, build }: StartOptions): Promise<void> {
	const config = settingsOrRefusal();
	mkdirSync(config.dataFolder, { recursive: true });
	const processFile = join(config.dataFolder, 'processes.json');
	await endStrays(processFile);

	const kept: Kept[] = [];
	const remember = () => {
		const pids = Object.fromEntries(kept.flatMap((one) => (one.pid === undefined ? [] : [[one.name, one.pid]])));
		writeFileSync(processFile, JSON.stringify({ start: process.pid, ...pids }));
	};
	const onLine = (name: string, line: string) => {
		// JSON log lines of our own processes go to the log file as they are; what else they say is worth seeing.
		if (!line.startsWith('{')) console.error(`${name}: ${line}`);
		else if (/"level":(50|60)/.test(line)) {
			try {
				const entry = JSON.parse(line) as { msg?: string; err?: { message?: string }; error?: string };
				console.error(`${name}: ${[entry.msg, entry.err?.message ?? entry.error].filter(Boolean).join(': ')}`);
			} catch {
				console.error(`${name}: ${line}`);
			}
		}
	};
	let stopping = false;
	let firstSignalAt = 0;
	const stopAll = async (code: number) => {
		if (stopping) return;
		stopping = true;
		// Sources stop and the pipeline drains first; the database is last.
		const byName = (name: string) => kept.filter((one) => one.name === name);
		await Promise.all([...byName('collector'), ...byName('web')].map((one) => one.stop()));
		await Promise.all(byName('simulators').map((one) => one.stop()));
		await Promise.all(byName('postgresql').map((one) => one.stop('SIGINT')));
		rmSync(processFile, { force: true });
		process.exit(code);
	};
	for (const signal of ['SIGINT', 'SIGTERM', 'SIGHUP'] as const) {
		process.on(signal, () => {
			const now = Date.now();
			if (firstSignalAt === 0) {
				firstSignalAt = now;
				console.error('Stopping');
				void stopAll(0);
			} else if (now - firstSignalAt > ONE_SIGNAL_MS) {
				console.error('Stopping at once');
				for (const one of kept) if (one.pid !== undefined) process.kill(one.pid, 'SIGKILL');
				process.exit(1);
			}
		});
	}

	try {
		await bringUp();
	} catch (error) {
		if (stopping) return;
		for (const one of [...kept].reverse()) await one.stop(one.name === 'postgresql' ? 'SIGINT' : 'SIGTERM');
		rmSync(processFile, { force: true });
		throw error;
	}

	async function bringUp(): Promise<void> {
		await requireFree(config.host, config.port, 'the web pages', 'PORT');
		let databaseUrl = config.databaseUrl;
		let ownerUrl = config.databaseUrl;
		let databaseFolder: string | undefined;
		if (databaseUrl) {
			await requireDatabase(databaseUrl);
		} else {
			const cluster = prepareCluster(config.dataFolder, config.pgPort);
			cluster.stopStray();
			await requireFree('127.0.0.1', config.pgPort, 'PostgreSQL', 'MILLRACE_PG_PORT');
			kept.push(keepRunning('postgresql', cluster.run, () => undefined, remember));
			remember();
			await prepareDatabase(cluster.addresses, config.dataFolder);
			({ app: databaseUrl, owner: ownerUrl } = cluster.addresses);
			databaseFolder = cluster.folder;
		}
		await migrateDatabase(ownerUrl ?? databaseUrl, 'drizzle');

		const held = await demoState(databaseUrl);
		const withSimulators = demo && (held === 'demo' || held === 'empty');
		if (!demo && held === 'demo')
			console.error(
				'This data folder holds the demo plant; only the simulators are left off. For an empty start set MILLRACE_DATA to another folder.',
			);
		if (demo && held === 'own') console.error('This data folder holds a plant of your own: the demo is not laid over it.');
		if (withSimulators) {
			const { simulators } = config;
			const ports: [number, string, string][] = [
				[simulators.opcua, 'the OPC UA simulator', 'SIM_OPCUA_PORT'],
				[simulators.modbus, 'the Modbus simulator', 'SIM_MODBUS_PORT'],
				[simulators.mqtt, 'the MQTT simulator', 'SIM_MQTT_PORT'],
				[simulators.smtp, 'the mail simulator', 'SIM_SMTP_PORT'],
				[simulators.receiver, 'the message receiver', 'SIM_RECEIVER_PORT'],
				[simulators.control, "the simulators' control", 'SIM_CONTROL_PORT'],
			];
			for (const [port, what, setting] of ports) await requireFree('127.0.0.1', port, what, setting);
			if (held === 'empty') await layDemo(databaseUrl, config);
		}

		const env: NodeJS.ProcessEnv = {
			...process.env,
			NODE_ENV: build === null ? 'development' : 'production',
			DATABASE_URL: databaseUrl,
			...(databaseFolder ? { MILLRACE_PG_FOLDER: databaseFolder } : {}),
			MILLRACE_DATA: config.dataFolder,
			MILLRACE_DEMO: withSimulators || held === 'demo' ? '1' : '0',
			PORT: String(config.port),
			HOST: config.host,
			ORIGIN: config.origin,
			BODY_SIZE_LIMIT: process.env.BODY_SIZE_LIMIT ?? '32M',
			SHUTDOWN_TIMEOUT: process.env.SHUTDOWN_TIMEOUT ?? '10',
			TZ: 'UTC',
		};
		if (withSimulators) env.MILLRACE_SMTP_URL ??= `smtp://127.0.0.1:${config.simulators.smtp}`;
		const node = (title: string, args: string[]) => () =>
			spawn(process.execPath, [`--title=${title}`, '--enable-source-maps', ...args], {
				env,
				stdio: ['ignore', 'pipe', 'pipe'],
				detached: true,
			});
		if (withSimulators) {
			kept.push(
				keepRunning(
					'simulators',
					node(
						'millrace-simulators',
						build === null ? ['--import', 'tsx', 'simulators/main.ts'] : [`${build}/processes/simulators/main.js`],
					),
					onLine,
					remember,
				),
			);
		}
		kept.push(
			keepRunning(
				'web',
				node(
					'millrace-web',
					build === null
						? ['node_modules/vite/bin/vite.js', 'dev', '--host', config.host, '--port', String(config.port)]
						: [`${build}/index.js`],
				),
				onLine,
				remember,
			),
		);
		kept.push(
			keepRunning(
				'collector',
				node(
					'millrace-collector',
					build === null ? ['--import', 'tsx', 'src/collector/main.ts'] : [`${build}/processes/src/collector/main.js`],
				),
				onLine,
				remember,
			),
		);
		remember();

		await waitUntilReady(config);
		console.log(`\nMillrace is at ${config.origin}`);
		if (env.MILLRACE_DEMO === '1') console.log('Sign in there with one of the "enter as" buttons. Ctrl-C stops everything.');
		else
			console.log(
				'First administrator: npm run admin -- user add --email you@example.org --name "Your name" --admin. Ctrl-C stops everything.',
			);
	}
}

/** Waits for the web process to answer `/readyz`; up to a minute on a slow machine. */
async function waitUntilReady(config: Config): Promise<void> {
	const host = config.host === '0.0.0.0' ? '127.0.0.1' : config.host;
	const deadline = Date.now() + 90_000;
	let last = 'no answer';
	while (Date.now() < deadline) {
		try {
			const answer = await fetch(`http://${host}:${config.port}/readyz`, { signal: AbortSignal.timeout(5_000) });
			if (answer.ok) return;
			last = `${answer.status} ${(await answer.text()).slice(0, 300)}`;
		} catch (error) {
			last = (error as Error).message;
		}
		await new Promise((resolve) => setTimeout(resolve, 200));
	}
	throw new Refusal(`Millrace did not become ready within 90 s (${last}). The lines above say why.`);
}
