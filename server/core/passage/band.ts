import { spanAt, type BandRule, type BridgeDefinition, type Sensor } from '../contract/bridge.ts';
import { bandEdge, type BandEdge } from '../mechanics/eurocode.ts';

/** Upper edge of a limit's band for one sensor: by the rule of the code for its span, or as the definition fixes it. */
export function bandOfLimit(
  bridge: Pick<BridgeDefinition, 'spans'>,
  rule: BandRule,
  sensor: Pick<Sensor, 'alongM'>,
): BandEdge {
  if (rule === 'EN 1990 A2') return bandEdge(spanAt(bridge, sensor.alongM));
  return { upToHz: rule.upToHz, setBy: `fixed in the definition at ${rule.upToHz} Hz` };
}
