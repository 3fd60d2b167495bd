import { expect, test } from 'vitest';
import { createRoom } from '../../server/history/room.ts';

test('there is room up to the limit, and beyond it again when half of it is done, whether it succeeds or fails', async () => {
  const room = createRoom(4);
  const works = Array.from({ length: 5 }, () => Promise.withResolvers<number>());
  const held = works.slice(0, 4).map(({ promise }) => room.hold(promise));
  expect(room.free()).toBeNull();
  held.push(room.hold(works[4]!.promise));
  expect(room.held()).toBe(5);
  let resumed = false;
  const free = room.free()!.then(() => (resumed = true));
  works[0]!.resolve(1);
  works[1]!.reject(new Error('refused'));
  await Promise.allSettled(held.slice(0, 2));
  await Promise.resolve();
  expect([resumed, room.held()]).toEqual([false, 3]);
  works[2]!.resolve(3);
  await free;
  expect(room.held()).toBe(2);
  works[3]!.resolve(4);
  works[4]!.resolve(5);
  expect(await Promise.allSettled(held)).toMatchObject([
    { value: 1 },
    { status: 'rejected' },
    { value: 3 },
    { value: 4 },
    { value: 5 },
  ]);
});
