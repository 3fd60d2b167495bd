import type {
  Acknowledgement,
  AlarmQuery,
  ApiComplaint,
  BridgeView,
  Day,
  DayQuery,
  ErrorRow,
  PassagePage,
  PassageQuery,
  PassageView,
  Recomputed,
  SpectraView,
} from '#core/contract/api.ts';
import type { Alarm } from '#core/contract/alarm.ts';
import { decodeFrame, type Frame } from '#core/contract/frame.ts';
import type { BridgeStatus, SystemStatus } from '#core/contract/status.ts';

/** A request that was answered with a complaint, or not at all. */
export class RequestFailed extends Error {
  /** Of errors.ts; `UNREACHABLE` where no answer came. */
  readonly code: string;
  /** HTTP status; 0 where no answer came. */
  readonly status: number;

  constructor(complaint: ApiComplaint, status: number) {
    super(complaint.message);
    this.name = 'RequestFailed';
    this.code = complaint.code;
    this.status = status;
  }
}

interface Call {
  signal?: AbortSignal | undefined;
}

const at = encodeURIComponent;

export const api = {
  status: (call?: Call) => json<SystemStatus>('/api/status', call),
  bridges: (call?: Call) => json<BridgeStatus[]>('/api/bridges', call),
  bridge: (bridge: string, call?: Call) => json<BridgeView>(`/api/bridges/${at(bridge)}`, call),
  definition: (bridge: string, version?: number, call?: Call) =>
    text(`/api/bridges/${at(bridge)}/definition${search({ version })}`, call),
  spectra: (bridge: string, sensor?: string, call?: Call) =>
    json<SpectraView>(`/api/bridges/${at(bridge)}/spectra${search({ sensor })}`, call),
  passages: (query: PassageQuery, call?: Call) => json<PassagePage>(`/api/passages${search(query)}`, call),
  days: (query: DayQuery, call?: Call) => json<Day[]>(`/api/days${search(query)}`, call),
  passage: (passage: string, call?: Call) => json<PassageView>(`/api/passages/${at(passage)}`, call),
  waveform: (passage: string, call?: Call) => frame(`/api/passages/${at(passage)}/waveform`, call),
  recomputed: (passage: string, call?: Call) => json<Recomputed>(`/api/passages/${at(passage)}/recomputed`, call),
  alarms: (query: AlarmQuery = {}, call?: Call) => json<Alarm[]>(`/api/alarms${search(query)}`, call),
  alarm: (alarm: string, call?: Call) => json<Alarm>(`/api/alarms/${at(alarm)}`, call),
  acknowledge: (alarm: string, answer: Acknowledgement, call?: Call) =>
    json<Alarm>(`/api/alarms/${at(alarm)}/acknowledge`, call, {
      method: 'POST',
      headers: { 'content-type': 'application/json' },
      body: JSON.stringify(answer),
    }),
  errors: (call?: Call) => json<ErrorRow[]>('/api/errors', call),
};

/** Addresses of files to be saved, for links. */
export const files = {
  waveformCsv: (passage: string, sensor?: string) => `/api/passages/${at(passage)}/waveform.csv${search({ sensor })}`,
  waveformParquet: (passage: string) => `/api/passages/${at(passage)}/waveform.parquet`,
  definition: (bridge: string, version?: number) => `/api/bridges/${at(bridge)}/definition${search({ version })}`,
  openapi: '/api/openapi.json',
} as const;

/** The server's own schemas hold what these routes answer, so the shape is taken on its word. */
async function json<T>(path: string, call?: Call, init?: RequestInit): Promise<T> {
  const response = await ask(path, call, init);
  return (await response.json()) as T;
}

async function text(path: string, call?: Call): Promise<string> {
  return (await ask(path, call)).text();
}

async function frame(path: string, call?: Call): Promise<Frame> {
  const bytes = new Uint8Array(await (await ask(path, call)).arrayBuffer());
  return decodeFrame(bytes, utf8);
}

const decoder = new TextDecoder();
const utf8 = (bytes: Uint8Array): string => decoder.decode(bytes);

async function ask(path: string, call: Call = {}, init: RequestInit = {}): Promise<Response> {
  let response: Response;
  try {
    response = await fetch(path, { ...init, signal: call.signal ?? null });
  } catch (error) {
    if (error instanceof DOMException && error.name === 'AbortError') throw error;
    throw new RequestFailed({ code: 'UNREACHABLE', message: 'the server does not answer' }, 0);
  }
  if (response.ok) return response;
  throw new RequestFailed(await complaintOf(response), response.status);
}

async function complaintOf(response: Response): Promise<ApiComplaint> {
  try {
    const body: unknown = await response.json();
    if (isComplaint(body)) return body;
  } catch {
    // An answer that is no JSON comes from a proxy in between; its status is all that is known.
  }
  return { code: `HTTP_${response.status}`, message: `the server answered ${response.status} ${response.statusText}` };
}

function isComplaint(body: unknown): body is ApiComplaint {
  return typeof body === 'object' && body !== null && 'code' in body && 'message' in body;
}

function search(query: Readonly<Record<string, string | number | undefined>>): string {
  const params = new URLSearchParams();
  for (const [name, value] of Object.entries(query)) if (value !== undefined) params.set(name, String(value));
  const text = params.toString();
  return text === '' ? '' : `?${text}`;
}
