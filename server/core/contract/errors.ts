/**
 * Every failure that comes from outside, by stable code. Scripts and tests rely on the codes; words may be bettered.
 * `remedy` is what the person who reads it can do.
 */
export const ERRORS = {
  // a message from a logger
  MESSAGE_TOPIC: {
    what: 'topic does not name a bridge and logger',
    remedy: 'publish to <root>/<bridge>/<logger>/samples or /senml, or map the topic in the definition',
  },
  MESSAGE_TOO_LARGE: { what: 'message is larger than a block may be', remedy: 'send shorter blocks, 0.1 to 1 s each' },
  MESSAGE_TRUNCATED: {
    what: 'message ends before its content does',
    remedy: "check the logger's encoder and its link",
  },
  MESSAGE_ENCODING: { what: 'message is not valid CBOR, JSON or UTF-8', remedy: "check the logger's encoder" },
  MESSAGE_DEPTH: { what: 'message is nested too deeply', remedy: 'send one flat map or one array of records' },
  MESSAGE_SHAPE: {
    what: 'a field is missing or of the wrong type',
    remedy: 'compare the message with the contract in the README',
  },
  MESSAGE_RATE_LIMIT: { what: 'messages come faster than they can be taken', remedy: 'send larger blocks less often' },
  BRIDGE_UNKNOWN: { what: 'no bridge of this id is defined', remedy: 'add its definition, or correct the topic' },
  LOGGER_UNKNOWN: {
    what: 'the bridge has no logger of this id',
    remedy: 'add the logger to the definition, or correct the topic',
  },
  SENSOR_UNKNOWN: {
    what: 'the bridge has no sensor of this name',
    remedy: 'add the sensor, or map its name under loggers.channels',
  },
  SENSOR_TOO_MANY: { what: 'more channels than a block may have', remedy: 'send at most 256 channels a message' },
  UNIT_UNKNOWN: {
    what: "the unit does not belong to the sensor's quantity",
    remedy: 'send one of the units listed for the quantity',
  },
  RATE_WRONG: {
    what: 'the rate is not that of the definition',
    remedy: "correct rateHz in the definition or the logger's setting",
  },
  TIME_OUT_OF_RANGE: { what: 'sample times before 2000 or after 2100', remedy: "set the logger's clock" },
  TIME_IN_FUTURE: {
    what: 'sample times more than a minute ahead of this machine',
    remedy: "set the logger's clock, or this machine's",
  },
  VALUE_NOT_FINITE: { what: 'values that are not finite numbers', remedy: 'they are kept as gaps; check the sensor' },
  // a definition
  DEFINITION_UNREADABLE: { what: 'the file cannot be read', remedy: 'check path and permissions' },
  DEFINITION_SYNTAX: { what: 'the file is not valid YAML', remedy: 'correct the line named' },
  DEFINITION_INVALID: { what: 'a field does not meet its expectation', remedy: 'correct the field named' },
  DEFINITION_DUPLICATE_ID: {
    what: 'an id is used twice',
    remedy: 'give each span, logger, sensor and limit its own id',
  },
  DEFINITION_REFERENCE: {
    what: 'a field names something that is not defined',
    remedy: 'define it or correct the name',
  },
  // a recording
  RECORDING_UNREADABLE: { what: 'the recording cannot be read', remedy: 'check path and permissions' },
  RECORDING_FORMAT: {
    what: 'the recording is not in a form that can be read',
    remedy: 'use CSV with a header and a time column, or Parquet as written by this program',
  },
  RECORDING_NO_CHANNEL: {
    what: 'no column of the recording is a sensor of the bridge',
    remedy: 'name the columns after the sensors, or map them under loggers.channels',
  },
  RECORDING_TIME: {
    what: 'the time column cannot be understood',
    remedy: 'use Unix epoch or ISO 8601, or seconds from zero with, for instance, --start 2026-06-01T08:00:00Z',
  },
  // machine and neighbours
  FILE_UNWRITABLE: { what: 'the file cannot be written', remedy: 'check path, permissions and space' },
  BROKER_UNREACHABLE: {
    what: 'the MQTT broker does not answer',
    remedy: 'check address, port, TLS and credentials; connecting is tried again by itself',
  },
  BROKER_REFUSED: { what: 'the MQTT broker refused the connection', remedy: 'check user, password and certificates' },
  CLIENT_REFUSED: {
    what: 'a client of the embedded broker was refused or dropped',
    remedy: 'connect with MQTT 3.1.1, publish only what a logger may; for MQTT 5 use an outside broker',
  },
  PORT_IN_USE: { what: 'another program listens on the port', remedy: 'stop it or choose another port' },
  DISK_FULL: {
    what: 'no space is left for the journal or the history',
    remedy: 'free space; blocks are not acknowledged meanwhile, so the broker keeps them',
  },
  JOURNAL_WRITE: {
    what: 'the journal could not be written',
    remedy: 'check the disk; blocks are not acknowledged meanwhile, so the broker keeps them',
  },
  JOURNAL_TAIL: {
    what: "the journal's last record was cut by a crash",
    remedy: 'nothing: it was not acknowledged and comes again',
  },
  JOURNAL_CORRUPT: {
    what: 'a journal file is damaged in its middle',
    remedy: 'the damaged part is skipped and kept aside; check the disk',
  },
  JOURNAL_TRIMMED: {
    what: 'the journal reached its limit of hours or bytes',
    remedy: 'raise journal limits if a longer replay is wanted',
  },
  STORE_CORRUPT: {
    what: 'the history database cannot be opened',
    remedy: 'it is set aside unchanged and a new one is filled from the archive; check the disk',
  },
  STORE_LOCKED: { what: 'another process has the history open', remedy: 'stop the other server on this data folder' },
  STORE_NEWER: {
    what: 'the history was written by a newer version of this program',
    remedy: 'start the newer version, or choose another data folder',
  },
  STORE_WRITE: { what: 'the history could not be written', remedy: 'check the disk; writing is tried again' },
  SNAPSHOT_WRITE: {
    what: "the pipeline's snapshot could not be written",
    remedy: 'check the disk; the older one and the journal serve meanwhile',
  },
  WORKER_FAILED: {
    what: 'a worker that runs pipelines stopped',
    remedy: 'nothing: it is started again from its snapshot and the journal; report it if it comes back',
  },
  SETTINGS_INVALID: {
    what: 'a setting does not meet its expectation',
    remedy: 'correct the setting named; see --help',
  },
  PORT_REFUSED: {
    what: 'the port or address cannot be listened on',
    remedy: 'choose an address of this machine and a port above 1023',
  },
  SNAPSHOT_UNUSABLE: {
    what: "the pipeline's snapshot is of another version or damaged",
    remedy: 'nothing: the journal is replayed from its beginning',
  },
  // people and their programs
  REQUEST_INVALID: { what: 'the request does not fit the interface', remedy: 'see /api/openapi.json' },
  NOT_FOUND: { what: 'there is no such thing', remedy: 'check the id' },
  ORIGIN_REFUSED: {
    what: 'the socket was opened from another site',
    remedy: 'open the page from this server, or allow its origin in the settings',
  },
  VIEWER_SLOW: {
    what: 'the viewer could not keep up and was dropped',
    remedy: 'it connects again by itself; choose fewer channels',
  },
  REQUESTS_TOO_MANY: { what: 'requests come faster than they are taken', remedy: 'wait a minute' },
  SERVER_FAULT: {
    what: 'the server made a mistake',
    remedy: 'see its log and report it; nothing that was stored is lost',
  },
  VIEWERS_TOO_MANY: { what: 'the limit of viewers is reached', remedy: 'close other pages or raise the limit' },
  ALARM_STATE: { what: 'the alarm is not in a state that allows this', remedy: 'load the alarm again' },
  USAGE: { what: 'the command was not understood', remedy: 'see --help' },
} as const satisfies Record<string, { what: string; remedy: string }>;

export type ErrorCode = keyof typeof ERRORS;

/** One complaint about something from outside. */
export interface Complaint {
  code: ErrorCode;
  /** Field, line or topic it is about, where there is one. */
  where?: string;
  /** What was found, what was expected. */
  detail: string;
}

/** A failure with a stable code, to be thrown where a result type would be in the way. */
export class SpanbeatError extends Error {
  readonly code: ErrorCode;
  readonly where: string | undefined;

  constructor(complaint: Complaint) {
    super(sentence(complaint));
    this.name = 'SpanbeatError';
    this.code = complaint.code;
    this.where = complaint.where;
  }
}

/** What happened, where, and what to do, in one line. */
export function sentence({ code, where, detail }: Complaint): string {
  const place = where === undefined ? '' : `${where}: `;
  return `${code}: ${place}${detail} (${ERRORS[code].what}). To do: ${ERRORS[code].remedy}.`;
}

/** A value from the border: what was asked for, or why not. */
export type Result<T> = { ok: true; value: T } | { ok: false; complaint: Complaint };

export const accept = <T>(value: T): Result<T> => ({ ok: true, value });
export const refuse = <T>(code: ErrorCode, detail: string, where?: string): Result<T> => ({
  ok: false,
  complaint: where === undefined ? { code, detail } : { code, where, detail },
});
