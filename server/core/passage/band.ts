import { spanAt, type BandRule, type BridgeDefinition, type Sensor } from '../contract/bridge.ts';
import { bandEdge, type BandEdge } from '../mechanics/eurocode.ts';

/** Above this share of the rate the band edge is out of reach of a digital filter worth the name: nothing is filtered. */
const BAND_OF_RATE = 0.45;

/** Whether samples of this rate can be filtered at a band's upper edge. */
export function canFilter(upToHz: number, rateHz: number): boolean {
  return upToHz <= BAND_OF_RATE * rateHz;
}

/** Upper edge of a limit's band for one sensor: by the rule of the code for its span, or as the definition fixes it. */
export function bandOfLimit(
  bridge: Pick<BridgeDefinition, 'spans'>,
  rule: BandRule,
  sensor: Pick<Sensor, 'alongM'>,
): BandEdge {
  if (rule === 'EN 1990 A2') return bandEdge(spanAt(bridge, sensor.alongM));
  return { upToHz: rule.upToHz, setBy: `fixed in the definition at ${rule.upToHz} Hz` };
}
