// Edge: cli. May touch: sockets on loopback. A line between two peers that can be spoiled on purpose.
import { connect, createServer, type Socket } from 'node:net';

/** `pass`: as it comes. `hold`: nothing goes through, and nobody is told. `trickle`: one byte at a time. */
export type LineState = 'pass' | 'hold' | 'trickle';

export interface FaultProxy {
	readonly port: number;
	/** Applies to lines that stand and to new ones. What is held goes on in its order when it passes again. */
	setState(state: LineState): void;
	/** Ends every line at once with a reset; new ones are taken. */
	cut(): void;
	close(): Promise<void>;
}

/** Bytes that wait on a held line, at most; then its sender is no longer read. */
const MOST_HELD = 1_000_000;

/** Listens on a free port of 127.0.0.1 and passes what it hears to the target. */
export async function startFaultProxy(targetPort: number): Promise<FaultProxy> {
	const lines = new Set<Line>();
	let state: LineState = 'pass';
	const server = createServer((near) => {
		const far = connect(targetPort, '127.0.0.1');
		const own = [new Line(near, far), new Line(far, near)];
		const end = () => {
			near.destroy();
			far.destroy();
			for (const line of own) lines.delete(line);
		};
		for (const socket of [near, far]) {
			socket.setNoDelay(true);
			socket.on('error', end);
			socket.on('close', end);
		}
		for (const line of own) {
			lines.add(line);
			line.setState(state);
		}
	});
	await new Promise<void>((resolve) => server.listen(0, '127.0.0.1', resolve));
	const { port } = server.address() as { port: number };
	return {
		port,
		setState(next) {
			state = next;
			for (const line of lines) line.setState(next);
		},
		cut() {
			for (const line of [...lines]) line.reset();
		},
		async close() {
			for (const line of [...lines]) line.reset();
			await new Promise((resolve) => server.close(resolve));
		},
	};
}

/** One direction. */
class Line {
	readonly #from: Socket;
	readonly #to: Socket;
	#state: LineState = 'pass';
	#held: Buffer[] = [];
	#heldBytes = 0;
	#isTrickling = false;

	constructor(from: Socket, to: Socket) {
		this.#from = from;
		this.#to = to;
		from.on('data', (chunk: Buffer) => {
			if (this.#state === 'pass' && this.#heldBytes === 0) {
				if (!to.write(chunk)) from.pause();
				return;
			}
			this.#held.push(chunk);
			this.#heldBytes += chunk.length;
			if (this.#heldBytes > MOST_HELD) from.pause();
			if (this.#state === 'trickle') void this.#trickle();
		});
		to.on('drain', () => from.resume());
	}

	setState(state: LineState): void {
		this.#state = state;
		if (state === 'pass') this.#release();
		if (state === 'trickle') void this.#trickle();
	}

	#release(): void {
		for (const chunk of this.#held.splice(0)) this.#to.write(chunk);
		this.#heldBytes = 0;
		this.#from.resume();
	}

	async #trickle(): Promise<void> {
		if (this.#isTrickling) return;
		this.#isTrickling = true;
		while (this.#state === 'trickle' && this.#heldBytes > 0 && !this.#to.destroyed) {
			const first = this.#held[0];
			if (!first) break;
			this.#to.write(first.subarray(0, 1));
			this.#heldBytes -= 1;
			if (first.length === 1) this.#held.shift();
			else this.#held[0] = first.subarray(1);
			await new Promise((resolve) => setImmediate(resolve));
		}
		this.#isTrickling = false;
	}

	reset(): void {
		this.#from.resetAndDestroy();
		this.#to.resetAndDestroy();
	}
}
