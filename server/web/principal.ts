import type { FastifyRequest } from 'fastify';

/** Who makes a request. */
export interface Principal {
  id: string;
  name: string;
  /** Where the request came from. */
  address: string;
  mayAcknowledge: boolean;
}

/**
 * The one place that says who a request comes from. This version has no accounts: whoever reaches the port, which is bound
 * to this machine unless the settings say otherwise, is the local operator, and signs with a name of their own.
 */
export function principalOf(request: FastifyRequest): Principal {
  return { id: 'local', name: 'local operator', address: request.ip, mayAcknowledge: true };
}
