// Pure.
import type { Gateway, Signal } from '../scenario/parts.ts';
import type { Plant } from '../scenario/plant.ts';
import { REGISTER_PLACES, type RegisterPlace } from '../demo/addresses.ts';

/** 16-bit registers by unit, table and address; what is not here answers exception 2. */
export type RegisterImage = (
	unitId: number,
	table: 'coil' | 'discrete-input' | 'holding-register' | 'input-register',
	register: number,
) => number | null;

/** A value as the registers of its place, high byte first in each, words in the place's own order. Not a number and no value are the sentinel or a quiet NaN. */
export function encodeValue(
	value: number | null,
	place: Pick<RegisterPlace, 'data_type' | 'word_order' | 'sentinels'>,
): number[] {
	const isMissing = value === null || Number.isNaN(value);
	const view = new DataView(new ArrayBuffer(8));
	switch (place.data_type) {
		case 'float32': {
			view.setFloat32(0, isMissing ? Number.NaN : value);
			const words = [view.getUint16(0), view.getUint16(2)];
			return place.word_order === 'little' ? words.reverse() : words;
		}
		case 'int16':
			view.setInt16(0, isMissing ? -32_768 : Math.max(-32_767, Math.min(32_767, Math.round(value))));
			return [view.getUint16(0)];
		default:
			return [isMissing ? 0xffff : Math.max(0, Math.min(0xfffe, Math.round(value)))];
	}
}

/** The registers of one gateway as the plant stands at a moment. */
export function plantImage(plant: Plant, gateway: Extract<Gateway, 'b' | 'rtu'>, now: () => number): RegisterImage {
	const places = new Map<string, { signal: Signal; place: RegisterPlace; word: number }>();
	const bits = new Map<string, { signal: Signal; bit: number }[]>();
	for (const signal of plant.signals) {
		const place = REGISTER_PLACES.get(signal.path);
		if (signal.gateway !== gateway || !place || place.unit_id == null || place.register == null) continue;
		const key = (register: number) => `${place.unit_id}|${place.table}|${register}`;
		if (place.bit != null) {
			const list = bits.get(key(place.register)) ?? [];
			list.push({ signal, bit: place.bit });
			bits.set(key(place.register), list);
			continue;
		}
		const words = place.data_type === 'float32' ? 2 : 1;
		for (let word = 0; word < words; word += 1) places.set(key(place.register + word), { signal, place, word });
	}
	return (unitId, table, register) => {
		const key = `${unitId}|${table}|${register}`;
		const packed = bits.get(key);
		if (packed)
			return packed.reduce((word, { signal, bit }) => word | ((plant.read(signal.path, now()).value ? 1 : 0) << bit), 0);
		const found = places.get(key);
		if (!found) return null;
		const { value } = plant.read(found.signal.path, now());
		return encodeValue(value === null ? null : value / found.signal.scale, found.place)[found.word] ?? 0;
	};
}

/** Registers between two that exist answer 0 on the real device; only stretches it does not know are refused. */
export function withGapsFilled(image: RegisterImage, most: number): RegisterImage {
	return (unitId, table, register) => {
		const own = image(unitId, table, register);
		if (own !== null) return own;
		for (let distance = 1; distance <= most; distance += 1) {
			if (image(unitId, table, register - distance) !== null || image(unitId, table, register + distance) !== null) return 0;
		}
		return null;
	};
}
