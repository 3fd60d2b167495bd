import type { FastifyError, FastifyReply, FastifyRequest } from 'fastify';
import type { ApiComplaint } from '#core/contract/api.ts';
import { SpanbeatError, sentence, type Complaint, type ErrorCode } from '#core/contract/errors.ts';

/** HTTP status of a complaint, by code; what is not listed is the server's own trouble. */
const STATUS: Partial<Record<ErrorCode, number>> = {
  REQUEST_INVALID: 400,
  NOT_FOUND: 404,
  ORIGIN_REFUSED: 403,
  ALARM_STATE: 409,
  REQUESTS_TOO_MANY: 429,
  STORE_WRITE: 503,
  DISK_FULL: 503,
};

/** An answer that is not 2xx, with its status. */
export function answerComplaint(reply: FastifyReply, complaint: Complaint): FastifyReply {
  return reply.code(STATUS[complaint.code] ?? 500).send(bodyOf(complaint));
}

export const bodyOf = (complaint: Complaint): ApiComplaint => ({
  code: complaint.code,
  message: sentence(complaint),
});

/** Whatever a route throws becomes a complaint; causes of our own making are logged and not told outside. */
export function answerError(
  error: FastifyError | SpanbeatError,
  request: FastifyRequest,
  reply: FastifyReply,
  report: (complaint: Complaint) => void,
): FastifyReply {
  if (error instanceof SpanbeatError) {
    // Whoever threw it has reported it.
    return reply.code(STATUS[error.code] ?? 500).send({ code: error.code, message: error.message });
  }
  const complaint = complaintOf(error, request);
  if (complaint.code === 'SERVER_FAULT') request.log.error(error);
  report(complaint);
  return answerComplaint(reply, complaint);
}

function complaintOf(error: FastifyError, request: FastifyRequest): Complaint {
  if (error.validation !== undefined) {
    const where = error.validationContext ?? 'request';
    const detail = error.validation.map(({ instancePath, message }) => `${instancePath} ${message ?? ''}`.trim());
    return { code: 'REQUEST_INVALID', where, detail: detail.join('; ').slice(0, 400) };
  }
  if (error.statusCode === 429) return { code: 'REQUESTS_TOO_MANY', detail: error.message };
  const where = `${request.method} ${request.routeOptions.url ?? ''}`;
  if (error.statusCode !== undefined && error.statusCode < 500) {
    return { code: 'REQUEST_INVALID', where, detail: error.message };
  }
  return { code: 'SERVER_FAULT', where, detail: 'see the log' };
}
