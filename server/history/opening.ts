import { access, constants, mkdir, rename } from 'node:fs/promises';
import { dirname } from 'node:path';
import { SpanbeatError } from '#core/contract/errors.ts';
import type { Report } from '../report.ts';
import { timeName, type Micros } from '#core/contract/time.ts';
import type { Database } from './database.ts';
import { migrate, probe } from './schema.ts';

export interface Opened {
  database: Database;
  /** It is new (or its filling was cut short) and is to be filled from the archive. */
  toFill: boolean;
}

/**
 * Opens the database, brings it to our schema and reads a little of everything in it. One that is damaged is set aside
 * unchanged, under its name with `.damaged-<time>`, and a new one is begun.
 *
 * @throws SpanbeatError STORE_LOCKED where another process has it, STORE_NEWER where a newer program wrote it, STORE_WRITE
 * where the folder or file may not be written: none of these is damage, and nothing is touched
 */
export async function openSound(
  file: string,
  open: (file: string) => Promise<Database>,
  nowMicros: Micros,
  report: Report,
): Promise<Opened> {
  await mkdir(dirname(file), { recursive: true }).catch(refuseWrite(file));
  await access(dirname(file), constants.W_OK).catch(refuseWrite(dirname(file)));
  if (await isThere(file)) await access(file, constants.R_OK | constants.W_OK).catch(refuseWrite(file));
  try {
    return await opened(file, open);
  } catch (failure) {
    if (failure instanceof SpanbeatError) throw failure;
    const detail = failure instanceof Error ? failure.message : String(failure);
    if (isLock(detail)) throw new SpanbeatError({ code: 'STORE_LOCKED', where: file, detail });
    if (isDisk(detail)) throw new SpanbeatError({ code: 'DISK_FULL', where: file, detail });
    const aside = await setAside(file, nowMicros);
    report({ code: 'STORE_CORRUPT', where: file, detail: `${detail}; set aside as ${aside}` });
    return opened(file, open);
  }
}

async function opened(file: string, open: (file: string) => Promise<Database>): Promise<Opened> {
  const database = await open(file);
  try {
    const toFill = await migrate(database);
    await probe(database.ask);
    return { database, toFill };
  } catch (failure) {
    database.close();
    throw failure;
  }
}

/** The file and its log of writes not yet merged, which belong together. */
async function setAside(file: string, nowMicros: Micros): Promise<string> {
  const aside = `${file}.damaged-${timeName(nowMicros)}`;
  await rename(file, aside);
  if (await isThere(`${file}.wal`)) await rename(`${file}.wal`, `${aside}.wal`);
  return aside;
}

const isLock = (detail: string): boolean =>
  /could not set lock|conflicting lock|already open|unique file handle/i.test(detail);
const isDisk = (detail: string): boolean => /ENOSPC|no space|disk full/i.test(detail);

const isThere = async (path: string): Promise<boolean> =>
  access(path).then(
    () => true,
    () => false,
  );

const refuseWrite =
  (where: string) =>
  (failure: unknown): never => {
    throw new SpanbeatError({
      code: 'STORE_WRITE',
      where,
      detail: failure instanceof Error ? failure.message : String(failure),
    });
  };
