// Edge: simulators. May touch: protocol servers, domain.
import { startControlPort } from './control/control-port.ts';
import { startGateway } from './modbus/gateway-b.ts';
import { startMqttSimulator } from './mqtt/mqtt-simulator.ts';
import { readPorts } from './ports.ts';
import { startReceiverSimulator } from './receiver/receiver-simulator.ts';
import { startGatewayA } from './opcua/gateway-a.ts';
import { createPlant } from './scenario/plant.ts';
import { DEMO_SEED } from './scenario/seed.ts';
import { startSmtpSimulator } from './smtp/smtp-simulator.ts';

process.title = 'millrace-simulators';

const ports = readPorts(process.env);
const plant = createPlant(DEMO_SEED);
const mqtt = await startMqttSimulator({ port: ports.mqtt, plant });
const gatewayB = await startGateway({ port: ports.modbus, plant, gateway: 'b' });
const boilerHouse = await startGateway({ port: ports.rtu, plant, gateway: 'rtu' });
const gatewayA = await startGatewayA({ port: ports.opcua, plant });
const smtp = await startSmtpSimulator({ port: ports.smtp });
const receiver = await startReceiverSimulator({ port: ports.receiver });
const control = await startControlPort({
	port: ports.control,
	plant,
	mqtt,
	smtp,
	receiver,
	actions: { 'mqtt-drop': () => mqtt.dropConnections() },
});
const running: { stop(): Promise<void> }[] = [control, receiver, smtp, gatewayA, gatewayB, boilerHouse, mqtt];

process.stdout.write(
	`simulators ready: OPC UA ${gatewayA.port}, Modbus ${gatewayB.port} and ${boilerHouse.port}, MQTT ${mqtt.port}, SMTP ${smtp.port}, receiver ${receiver.port}, control ${control.port}\n`,
);

let isEnding = false;
const end = () => {
	if (isEnding) return;
	isEnding = true;
	Promise.allSettled(running.map((one) => one.stop())).then(
		() => process.exit(0),
		() => process.exit(1),
	);
};
process.on('SIGTERM', end);
process.on('SIGINT', end);
