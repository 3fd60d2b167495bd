import type { FastifyError, FastifyReply, FastifyRequest, FastifySchemaValidationError } from 'fastify';
import type { TSchema } from 'typebox';
import { Compile } from 'typebox/compile';
import { Value } from 'typebox/value';
import type { ApiComplaint } from '#core/contract/api.ts';
import { SpanbeatError, sentence, type Complaint, type ErrorCode } from '#core/contract/errors.ts';
import { fieldName, shapeProblems } from '#core/contract/shape.ts';

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

/** Longest account of what is wrong in a request. */
export const LIMIT_DETAIL = 400;

/**
 * Checks a part of a request against its schema; what does not fit is told by field, what was found and what is allowed.
 * Text of an address becomes numbers where the schema has such; a body is taken as it is.
 */
export function compileCheck({ schema, httpPart = '' }: { schema: TSchema; httpPart?: string }): PartCheck {
  const shape = Compile(schema);
  return (given) => {
    const value = httpPart === 'body' ? given : Value.Convert(schema, given);
    if (shape.Check(value)) return { value };
    const error = shapeProblems(schema, value).problems.map(({ path, detail }) => ({
      keyword: '',
      instancePath: `/${path.join('/')}`,
      schemaPath: '',
      params: {},
      message: path.length === 0 ? detail : `${fieldName(path, '')}: ${detail}`,
    }));
    return { error };
  };
}

/** As the web framework wants it. */
type PartCheck = (given: unknown) => { value: unknown } | { error: FastifySchemaValidationError[] };

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
    const detail = error.validation.map(({ message }) => message).join('; ');
    return { code: 'REQUEST_INVALID', where, detail: detail.slice(0, LIMIT_DETAIL) };
  }
  if (error.statusCode === 429) return { code: 'REQUESTS_TOO_MANY', detail: error.message };
  const where = `${request.method} ${request.routeOptions.url ?? ''}`;
  if (error.statusCode !== undefined && error.statusCode < 500) {
    return { code: 'REQUEST_INVALID', where, detail: error.message };
  }
  return { code: 'SERVER_FAULT', where, detail: 'see the log' };
}
