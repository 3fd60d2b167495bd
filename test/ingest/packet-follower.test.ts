import fc from 'fast-check';
import { generate } from 'mqtt-packet';
import { describe, expect, it } from 'vitest';
import { PacketFollower } from '../../server/ingest/packet-follower.ts';
