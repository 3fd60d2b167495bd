import type { Alarm } from '#core/contract/alarm.ts';
import type { PassageView } from '#core/contract/api.ts';
import { isDeckAcceleration, spanAt } from '#core/contract/bridge.ts';
import { fixed } from '../format.ts';
import { sensorOf } from './alarm-words.ts';

/** Whether the sensor that raised an alarm is to be believed, and why. */
export interface Trust {
  answer: 'yes' | 'with doubt' | 'not known yet';
  reasons: { good: boolean; words: string }[];
}

/** Neighbours beyond this distance along the bridge say little about one another. */
const NEAR_M = 1;

export function trustOf(alarm: Alarm, view: PassageView | null): Trust {
  const reasons: Trust['reasons'] = [];
  if (alarm.doubt !== null) reasons.push({ good: false, words: alarm.doubt });
  if (alarm.verdict === 'confirmed') reasons.push({ good: true, words: 'the record confirms the live value' });
  if (alarm.verdict === 'corrected') {
    const found = alarm.recordSeverity === null ? 'below all limits' : `above ${alarm.recordSeverity}`;
    reasons.push({ good: false, words: `the record finds it ${found}` });
  }
  if (alarm.verdict === 'inconclusive' || alarm.verdict === 'no passage') {
    reasons.push({ good: false, words: 'there is no whole record to hold the live value against' });
  }
  if (view) reasons.push(...fromPassage(alarm, view));
  const doubtful = reasons.some(({ good }) => !good);
  return { answer: doubtful ? 'with doubt' : view ? 'yes' : 'not known yet', reasons };
}

function fromPassage(alarm: Alarm, { passage, definition }: PassageView): Trust['reasons'] {
  const channel = passage.channels.find(({ sensor }) => sensor === sensorOf(alarm));
  const sensor = definition.sensors.find(({ id }) => id === sensorOf(alarm));
  if (!channel || !sensor) return [{ good: false, words: 'the passage holds no measures of this sensor' }];
  const reasons: Trust['reasons'] = [];

  const peak = channel.bandPeak.value;
  const span = spanAt(definition, sensor.alongM).id;
  const neighbour = passage.channels
    .flatMap((other) => {
      const place = definition.sensors.find(({ id }) => id === other.sensor);
      if (!place || other === channel || !isDeckAcceleration(place)) return [];
      if (spanAt(definition, place.alongM).id !== span || other.bandPeak.value === null) return [];
      return [{ id: place.id, peak: other.bandPeak.value, far: Math.abs(place.alongM - sensor.alongM) }];
    })
    .toSorted((a, b) => a.far - b.far)[0];
  if (neighbour && peak !== null) {
    const less = Math.round((1 - neighbour.peak / peak) * 100);
    const where = neighbour.far < NEAR_M ? 'at the same place' : `${fixed(neighbour.far, 1)} m away`;
    reasons.push({
      good: neighbour.peak > peak * 0.3,
      words: `${neighbour.id}, ${where}, read ${fixed(neighbour.peak, 2)} m/s², ${less === 0 ? 'as much' : less > 0 ? `${less} % less` : `${-less} % more`}`,
    });
  }

  reasons.push(
    channel.flags.length === 0
      ? { good: true, words: 'no clipping, gap or stuck value' }
      : { good: false, words: `during the passage: ${channel.flags.join(', ')}` },
  );
  const noise = channel.noise.value;
  if (noise !== null) {
    const bound = sensor.noiseLimit;
    const within =
      bound === undefined
        ? ''
        : noise > bound
          ? `, above its bound of ${fixed(bound, 3)}`
          : `, bound ${fixed(bound, 3)}`;
    reasons.push({
      good: bound === undefined || noise <= bound,
      words: `noise before the train ${fixed(noise, 3)} m/s²${within}`,
    });
  }
  return reasons;
}
