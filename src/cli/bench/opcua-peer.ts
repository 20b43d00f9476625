// Edge: cli. May touch: simulators. An OPC UA server with many variables that change. Arguments: port, variables, milliseconds between changes of each.
import { startOpcuaSimulator } from '#simulators/opcua/opcua-simulator.ts';

const [port = 0, count = 0, everyMs = 1_000] = process.argv.slice(2).map(Number);
/** Changes are spread over their interval, as sensors do not all measure at once. */
const SLICES = 10;
const server = await startOpcuaSimulator({
	port,
	namespace: 'urn:bench:plant',
	variables: Array.from({ length: count }, (_, n) => ({ name: `V${n}`, value: 0 })),
});
let slice = 0;
setInterval(() => {
	// The value is the moment of the change, so that a reader knows how old it is.
	for (let n = slice; n < count; n += SLICES) server.set(`V${n}`, Date.now() + n / count / 10);
	slice = (slice + 1) % SLICES;
}, everyMs / SLICES);
process.on('SIGTERM', () => void server.stop().then(() => process.exit(0)));
process.stdout.write('ready\n');
