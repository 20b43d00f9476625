// Edge: metrics. May touch: prom-client, the web pool (select only).
import { Counter, Histogram, Registry, collectDefaultMetrics, type OpenMetricsContentType } from 'prom-client';

/** What this process counts; one registry of its own, nothing global. */
export const registry = new Registry<OpenMetricsContentType>();
registry.setContentType(Registry.OPENMETRICS_CONTENT_TYPE);
collectDefaultMetrics({ register: registry, prefix: 'millrace_web_' });

export const httpRequests = new Counter({
	name: 'millrace_http_requests',
	help: 'Requests answered, by route and status.',
	labelNames: ['method', 'route', 'status'] as const,
	registers: [registry],
});

export const httpDuration = new Histogram({
	name: 'millrace_http_duration_seconds',
	help: 'Time from a request to the start of its answer.',
	labelNames: ['route'] as const,
	buckets: [0.005, 0.02, 0.05, 0.1, 0.25, 1, 5, 30],
	registers: [registry],
});
