// Edge: simulators. May touch: protocol servers, domain. Gateway A alone: `node --import tsx simulators/opcua/main.ts`.
import { readPorts } from '../ports.ts';
import { createPlant } from '../scenario/plant.ts';
import { DEMO_SEED } from '../scenario/seed.ts';
import { startGatewayA } from './gateway-a.ts';

const server = await startGatewayA({ port: readPorts(process.env).opcua, plant: createPlant(DEMO_SEED) });
process.stdout.write(`OPC UA simulator ready at ${server.endpointUrl}\n`);
for (const signal of ['SIGINT', 'SIGTERM'] as const) process.on(signal, () => void server.stop().then(() => process.exit(0)));
