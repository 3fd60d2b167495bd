import { execFileSync } from 'node:child_process';
import { existsSync } from 'node:fs';

/**
 * Programs from the Debian packages that some tests compare with or run against. `npm test` passes without them
 * and says what it left out; in CI (`CI` set) every test runs, so a missing program fails there.
 *
 * @example describe.skipIf(!available('python3-scipy'))('Welch against SciPy', …)
 */
export type DebianPackage =
  'mosquitto' | 'mosquitto-clients' | 'chromium' | 'python3-scipy' | 'python3-nitime' | 'libmseed-doc';

/** Debian's own Python, for which python3-scipy is installed; another Python on the path would not have it. */
export const PYTHON = '/usr/bin/python3';

const known = new Map<DebianPackage, boolean>();

/** Whether a test that needs the package should run: it is installed, or this is CI. */
export function available(name: DebianPackage): boolean {
  if (process.env['CI']) return true;
  let present = known.get(name);
  if (present === undefined) {
    present = installed(name);
    known.set(name, present);
    if (!present) process.stderr.write(`left out: tests that need the Debian package ${name}\n`);
  }
  return present;
}

/** Path of the program of a package, null when it is not installed. */
export function programOf(name: 'mosquitto' | 'mosquitto-clients' | 'chromium'): string | null {
  return PROGRAMS[name].find((path) => existsSync(path)) ?? null;
}

const PROGRAMS = {
  mosquitto: ['/usr/sbin/mosquitto', '/usr/bin/mosquitto'],
  'mosquitto-clients': ['/usr/bin/mosquitto_pub'],
  chromium: ['/usr/bin/chromium', '/usr/bin/chromium-browser'],
} as const;

function installed(name: DebianPackage): boolean {
  switch (name) {
    case 'python3-scipy':
      return imports('scipy.signal');
    case 'python3-nitime':
      return existsSync('/usr/lib/python3/dist-packages/nitime');
    case 'libmseed-doc':
      return existsSync('/usr/share/doc/libmseed-doc');
    default:
      return programOf(name) !== null;
  }
}

function imports(module: string): boolean {
  try {
    execFileSync(PYTHON, ['-c', `import ${module}`], { stdio: 'ignore' });
    return true;
  } catch {
    return false; // no such Python or no such module: either way the comparison cannot be made
  }
}
