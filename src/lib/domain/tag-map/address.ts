// Pure.
/** An address on a source: what the source's protocol needs to fetch one raw value, and nothing of scale or unit. */
export interface ModbusAddress {
	kind: 'modbus';
	unitId: number;
	table: 'coil' | 'discrete-input' | 'input-register' | 'holding-register';
	/** 0-based, as on the wire. */
	register: number;
	dataType: ModbusDataType;
	/** Order of the bytes within a register. */
	byteOrder: 'big' | 'little';
	/** Order of the registers within a value: `big` is high word first. */
	wordOrder: 'big' | 'little';
	/** Bit of the ordered value, 0 the least significant. */
	bit: number | null;
}
export const MODBUS_TABLES = ['coil', 'discrete-input', 'input-register', 'holding-register'] as const;
export const MODBUS_DATA_TYPES = [
	'bool',
	'int16',
	'uint16',
	'int32',
	'uint32',
	'int64',
	'uint64',
	'float32',
	'float64',
	'bcd16',
	'bcd32',
] as const;
export type ModbusDataType = (typeof MODBUS_DATA_TYPES)[number];

export interface OpcuaAddress {
	kind: 'opcua';
	/** `nsu=URI;i=…` (namespace by URI; index 0 may stand as `i=…`). */
	nodeId: string;
	/** OPC UA NumericRange, e.g. `2` or `0:3`. */
	indexRange: string | null;
}

export interface MqttAddress {
	kind: 'mqtt';
	/** Topic or topic filter. */
	topic: string;
	/** JSON Pointers [RFC 6901]; null or empty: the whole payload is the number. */
	valuePointer: string | null;
	timePointer: string | null;
	qualityPointer: string | null;
	timeFormat: 'auto' | 's' | 'ms' | 'us' | 'ns' | 'rfc3339';
}

export interface SparkplugAddress {
	kind: 'sparkplug';
	groupId: string;
	edgeNodeId: string;
	deviceId: string | null;
	metric: string;
}

export type Address = ModbusAddress | OpcuaAddress | MqttAddress | SparkplugAddress;

/** An address wanted from a source, with how often; `key` is the tag id and comes back on every sample. */
export interface WantedAddress {
	key: number;
	address: Address;
	/** Polling or sampling interval; for MQTT the expected one. */
	intervalMs: number;
}

/** Registers a data type takes on the wire. */
export function registersOf(dataType: ModbusDataType): number {
	switch (dataType) {
		case 'int32':
		case 'uint32':
		case 'float32':
		case 'bcd32':
			return 2;
		case 'int64':
		case 'uint64':
		case 'float64':
			return 4;
		default:
			return 1;
	}
}

/** The four orders in which a device may send the bytes of a value. */
export const ORDERS_OF = [
	{ byteOrder: 'big', wordOrder: 'big' },
	{ byteOrder: 'big', wordOrder: 'little' },
	{ byteOrder: 'little', wordOrder: 'big' },
	{ byteOrder: 'little', wordOrder: 'little' },
] as const;
