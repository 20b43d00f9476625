// Edge: sources. May touch: the sources' own folders. Each protocol package is loaded only where a source of its kind runs.
import type { ModbusSettings, MqttSettings, OpcuaSettings, SourceKind } from '#lib/domain/source-settings.ts';
import type { Source, SourceContext } from './source.ts';

export interface SourceToCreate {
	/** The source's id; before it is saved, any text that no other has. */
	id: string;
	kind: SourceKind;
	/** Parsed settings of the kind, secrets included. */
	settings: Record<string, unknown>;
}

/** Makes the source of a kind. The settings must have passed the kind's schema. */
export async function createSource(source: SourceToCreate, context: SourceContext): Promise<Source> {
	switch (source.kind) {
		case 'opcua': {
			const { createOpcuaSource } = await import('./opcua/opcua-source.ts');
			return createOpcuaSource(source.settings as OpcuaSettings, context);
		}
		case 'modbus': {
			const { createModbusSource } = await import('./modbus/modbus-source.ts');
			return createModbusSource(source.settings as ModbusSettings, context);
		}
		case 'mqtt': {
			const { createMqttSource } = await import('./mqtt/mqtt-source.ts');
			return createMqttSource(source.settings as MqttSettings, { ...context, sourceId: source.id });
		}
	}
}
