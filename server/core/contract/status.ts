import { Type, type Static } from 'typebox';

const Nullable = <T extends Parameters<typeof Type.Union>[0][number]>(type: T) => Type.Union([type, Type.Null()]);

/** How one bridge stands. `no data` is never shown as normal. */
export const BridgeStatus = Type.Object({
  id: Type.String(),
  name: Type.String(),
  line: Type.String(),
  chainageKm: Type.Number(),
  monitoring: Type.Union([
    Type.Literal('measuring'),
    Type.Literal('partly measuring'),
    Type.Literal('no data'),
    Type.Literal('no data yet'),
    Type.Literal('bad definition'),
  ]),
  channels: Type.Integer(),
  channelsAlive: Type.Integer(),
  newestMicros: Nullable(Type.Integer()),
  /** Passage now on the bridge. */
  passageInProgress: Nullable(Type.String()),
  lastPassage: Nullable(Type.String()),
  unacknowledged: Type.Object({ AL: Type.Integer(), IL: Type.Integer(), IAL: Type.Integer() }),
  /** Complaint about its definition, where it has one. */
  complaint: Nullable(Type.String()),
});
export type BridgeStatus = Static<typeof BridgeStatus>;

export const SystemStatus = Type.Object({
  /** ISO 8601 UTC start of this run. */
  started: Type.String(),
  broker: Type.Object({
    kind: Type.Union([Type.Literal('embedded'), Type.Literal('outside')]),
    connected: Type.Boolean(),
    address: Type.String(),
  }),
  journal: Type.Object({ bytes: Type.Number(), oldestMicros: Nullable(Type.Integer()), full: Type.Boolean() }),
  /** Complaints counted since the start, by code of errors.ts. */
  complaints: Type.Record(Type.String(), Type.Integer()),
  bridges: Type.Array(BridgeStatus),
  viewers: Type.Integer(),
});
export type SystemStatus = Static<typeof SystemStatus>;
