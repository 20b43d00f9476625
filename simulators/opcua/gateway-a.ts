// Edge: simulators. May touch: node-opcua server, domain. Wireless gateway A, as the plant stands.
import { GATEWAY_A_NAMESPACE } from '../demo/addresses.ts';
import { CLOCK_FAST_MS } from '../scenario/events.ts';
import type { Plant } from '../scenario/plant.ts';
import { startOpcuaSimulator, type OpcuaSimulator } from './opcua-simulator.ts';

const LOOK_MS = 1_000;

/** Starts the gateway: each value is set when its sensor has measured; restarts and a fast clock follow the plant's events. */
export async function startGatewayA({ port, plant }: { port: number; plant: Plant }): Promise<OpcuaSimulator> {
	const signals = plant.signals.filter((signal) => signal.gateway === 'a');
	const nameOf = (signal: (typeof signals)[number]) => `${signal.sensor ?? ''}.${signal.leaf}`;
	const server = await startOpcuaSimulator({
		port,
		namespace: GATEWAY_A_NAMESPACE,
		variables: signals.map((signal) => ({
			name: nameOf(signal),
			unit: signal.unit,
			low: signal.low / signal.scale,
			high: signal.high / signal.scale,
		})),
	});
	const shown = new Map<string, string>();
	let restartedFrom = 0;
	let isRestarting = false;
	const look = () => {
		const now = Date.now();
		server.setClockOffset(plant.event('clock-fast', now) ? CLOCK_FAST_MS : 0);
		const restart = plant.event('opcua-restart', now);
		if (restart && restart.from !== restartedFrom && !isRestarting) {
			restartedFrom = restart.from;
			isRestarting = true;
			void server.restart().finally(() => (isRestarting = false));
			return;
		}
		if (isRestarting) return;
		for (const signal of signals) {
			const { value, measuredAt, status } = plant.read(signal.path, now);
			const mark = `${measuredAt} ${value} ${status}`;
			if (shown.get(signal.path) === mark) continue;
			shown.set(signal.path, mark);
			server.set(nameOf(signal), value === null ? null : value / signal.scale, { at: measuredAt, isBad: value === null });
		}
	};
	look();
	const timer = setInterval(look, LOOK_MS);
	return {
		...server,
		stop: async () => {
			clearInterval(timer);
			await server.stop();
		},
	};
}
