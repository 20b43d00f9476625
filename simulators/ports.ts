// Pure.
import { z } from 'zod';

const port = (standard: number) => z.coerce.number().int().min(0).max(65_535).default(standard);

const schema = z.object({
	SIM_OPCUA_PORT: port(14_841),
	SIM_HISTORY_PORT: port(14_842),
	SIM_MODBUS_PORT: port(15_021),
	SIM_RTU_PORT: port(15_022),
	SIM_MQTT_PORT: port(11_883),
	SIM_SMTP_PORT: port(11_025),
	SIM_RECEIVER_PORT: port(11_080),
	SIM_CONTROL_PORT: port(11_090),
});

export interface SimulatorPorts {
	opcua: number;
	history: number;
	modbus: number;
	rtu: number;
	mqtt: number;
	smtp: number;
	receiver: number;
	control: number;
}

/** Ports from the environment; throws with the name of a wrong one. */
export function readPorts(environment: Record<string, string | undefined>): SimulatorPorts {
	const read = schema.parse(environment);
	return {
		opcua: read.SIM_OPCUA_PORT,
		history: read.SIM_HISTORY_PORT,
		modbus: read.SIM_MODBUS_PORT,
		rtu: read.SIM_RTU_PORT,
		mqtt: read.SIM_MQTT_PORT,
		smtp: read.SIM_SMTP_PORT,
		receiver: read.SIM_RECEIVER_PORT,
		control: read.SIM_CONTROL_PORT,
	};
}
