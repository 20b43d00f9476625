// Edge: simulators. May touch: protocol servers, domain. Gateway B alone: `node --import tsx simulators/modbus/main.ts`.
import { readPorts } from '../ports.ts';
import { createPlant } from '../scenario/plant.ts';
import { DEMO_SEED } from '../scenario/seed.ts';
import { startGateway } from './gateway-b.ts';

const device = await startGateway({ port: readPorts(process.env).modbus, plant: createPlant(DEMO_SEED), gateway: 'b' });
process.stdout.write(`Modbus simulator ready on 127.0.0.1, port ${device.port}\n`);
for (const signal of ['SIGINT', 'SIGTERM'] as const) process.on(signal, () => void device.stop().then(() => process.exit(0)));
