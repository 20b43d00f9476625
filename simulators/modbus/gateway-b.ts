// Edge: simulators. May touch: protocol servers, domain. Wireless gateway B and the boiler house line, as the plant stands.
import type { Plant } from '../scenario/plant.ts';
import { startModbusSimulator, type ModbusSimulator } from './modbus-simulator.ts';
import { plantImage, withGapsFilled } from './register-image.ts';

/** Registers that one block event takes: the temperatures of unit 4. */
const REFUSED_BLOCK = { unitId: 4, from: 200, to: 204, code: 2 };
const LOOK_MS = 250;

/** Starts a device that follows the plant's events: exception 2 on one block, silence for a while. */
export async function startGateway(options: { port: number; plant: Plant; gateway: 'b' | 'rtu' }): Promise<ModbusSimulator> {
	const { plant, gateway, port } = options;
	const device = await startModbusSimulator({
		port,
		framing: gateway === 'b' ? 'tcp' : 'rtu',
		image: withGapsFilled(
			plantImage(plant, gateway, () => Date.now()),
			40,
		),
		mostClients: 4,
	});
	const timer =
		gateway === 'b'
			? setInterval(() => {
					const now = Date.now();
					device.behaviour.exceptions = plant.event('modbus-exception', now) ? [REFUSED_BLOCK] : [];
					if (plant.event('modbus-silence', now)) device.behaviour.silent.add(null);
					else device.behaviour.silent.delete(null);
				}, LOOK_MS)
			: undefined;
	return {
		...device,
		get requests() {
			return device.requests;
		},
		stop: async () => {
			clearInterval(timer);
			await device.stop();
		},
	};
}
