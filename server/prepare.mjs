// Makes a fresh clone ready to run: packages as the lock file says, and the built pages. Plain JavaScript without
// packages, because it runs before there are any, on whatever Node (20 or newer) the machine has.
//
//   node server/prepare.mjs [--all] [--no-client] [--quiet]
//
//   --all         packages for developing and testing too
//   --no-client   leave the pages as they are
//   --quiet       say nothing unless there is something to do
import { spawn } from 'node:child_process';
import { createHash } from 'node:crypto';
import { existsSync, mkdirSync, readdirSync, readFileSync, rmSync, statSync, writeFileSync } from 'node:fs';
import { dirname, join, relative } from 'node:path';
import { fileURLToPath } from 'node:url';

const ROOT = join(dirname(fileURLToPath(import.meta.url)), '..');
const MODULES = join(ROOT, 'node_modules');
const NODE = join(MODULES, '.bin', 'node');
const STAMP = join(MODULES, '.spanbeat.json');
const PAGES = join(ROOT, 'client', 'dist');
const BUILT = join(PAGES, '.built');
const OLDEST_NODE = 20;

const flags = new Set(process.argv.slice(2));
const quiet = flags.has('--quiet');
const all = flags.has('--all');

/** A failure with what the person can do about it. */
class Trouble extends Error {}

/** The child that is running, so that Ctrl-C ends it too. */
let running = null;
/** A line on the terminal has no end yet. */
let lineOpen = false;
for (const signal of ['SIGINT', 'SIGTERM']) {
  process.on(signal, () => {
    running?.kill(signal);
    endLine();
    process.stderr.write('stopped; the next start goes on from the beginning of this step\n');
    process.exit(signal === 'SIGINT' ? 130 : 143);
  });
}

try {
  refuseOldNode();
  await preparePackages();
  if (!flags.has('--no-client')) await preparePages();
} catch (failure) {
  if (!(failure instanceof Trouble)) throw failure;
  endLine();
  process.stderr.write(`\n${failure.message}\n`);
  process.exitCode = 1;
}

function refuseOldNode() {
  const major = Number(process.versions.node.split('.')[0]);
  if (major >= OLDEST_NODE) return;
  throw new Trouble(
    `This is Node ${process.versions.node}; ${OLDEST_NODE} or newer is needed to install the pinned one.`,
  );
}

// packages

async function preparePackages() {
  const lock = sha256(readFileSync(join(ROOT, 'package-lock.json')));
  const before = readJson(STAMP);
  const stamp = before?.lock === lock ? before : (adopted(lock) ?? before);
  const withDev = all || stamp?.dev === true;
  const pinned = readJson(join(ROOT, 'package.json')).dependencies.node;
  const ready = stamp?.lock === lock && (!all || stamp.dev) && stamp.node === pinned && existsSync(NODE);
  if (ready) return;
  const what = withDev ? 'packages, with those for developing and testing' : 'packages';
  await withProgress(`Installing ${what} (npm ci)`, async () => {
    rmSync(STAMP, { force: true });
    const words = ['ci', '--no-audit', '--no-fund', '--no-progress', '--loglevel=error'];
    const { code, output } = await runNpm(withDev ? [...words, '--include=dev'] : [...words, '--omit=dev']);
    if (code !== 0) throw new Trouble(npmTrouble(output));
    await checkNode(pinned);
    stampPackages(lock, withDev, pinned);
  });
}

/** Packages that somebody installed by hand and that are those of the lock file need no installing. */
function adopted(lock) {
  const wanted = readJson(join(ROOT, 'package-lock.json'))?.packages;
  const found = readJson(join(MODULES, '.package-lock.json'))?.packages;
  if (wanted === undefined || found === undefined) return null;
  const missing = Object.entries(wanted).filter(
    ([path, { version, optional, link }]) => path !== '' && !optional && !link && found[path]?.version !== version,
  );
  if (missing.some(([, { dev, devOptional }]) => !dev && !devOptional)) return null;
  if (!existsSync(NODE)) return null;
  const node = readJson(join(MODULES, 'node', 'package.json'))?.version;
  return stampPackages(lock, missing.length === 0, node);
}

function stampPackages(lock, dev, node) {
  const stamp = { lock, dev, node };
  writeFileSync(STAMP, JSON.stringify(stamp));
  return stamp;
}

async function checkNode(pinned) {
  const { code, output } = await run(NODE, ['--version']);
  if (code === 0 && output.trim() === `v${pinned}`) return;
  throw new Trouble(
    `The pinned Node ${pinned} did not come with the packages: ${relative(ROOT, NODE)} answers "${output.trim().slice(0, 200)}".\n` +
      'Its install script may have been forbidden (npm config get ignore-scripts), or there is no build of it for this machine.',
  );
}

function runNpm(words) {
  const npm = process.env.npm_execpath;
  return npm?.endsWith('.js') ? run(process.execPath, [npm, ...words]) : run('npm', words);
}

function npmTrouble(output) {
  const tail = output.trim().split('\n').slice(-12).join('\n');
  const cause = [
    [
      /ENOTFOUND|EAI_AGAIN|ETIMEDOUT|ECONNREFUSED|ECONNRESET|ENETUNREACH|EHOSTUNREACH/,
      'The package registry cannot be reached. Check the network (and proxy) and start again.',
    ],
    [/ENOSPC/, 'No space is left on the disk. Free some (about 500 MB are needed) and start again.'],
    [/EACCES|EPERM|EROFS/, 'A file may not be written. Check who owns this folder and the npm cache.'],
    [
      /EINTEGRITY/,
      'A package differs from what the lock file says. Empty the npm cache (npm cache clean --force) and start again.',
    ],
    [/EUSAGE|can only install packages when/, 'package.json and package-lock.json do not belong together.'],
    [/spawn npm ENOENT/, 'npm was not found. Install Node with npm, then start again.'],
  ].find(([pattern]) => pattern.test(output));
  return `Installing failed. ${cause?.[1] ?? ''}\n\n${tail}`;
}

// pages

async function preparePages() {
  const sources = hashOf([join(ROOT, 'client'), join(ROOT, 'server', 'core'), join(ROOT, 'package-lock.json')]);
  const built = existsSync(BUILT) && readFileSync(BUILT, 'utf8') === sources;
  if (built && existsSync(join(PAGES, 'index.html'))) return;
  await withProgress('Building the pages (vite build)', async () => {
    const vite = join(MODULES, 'vite', 'bin', 'vite.js');
    const { code, output } = await run(NODE, [vite, 'build', 'client', '--logLevel', 'warn']);
    if (code !== 0)
      throw new Trouble(`Building the pages failed.\n\n${output.trim().split('\n').slice(-20).join('\n')}`);
    mkdirSync(PAGES, { recursive: true });
    writeFileSync(BUILT, sources);
  });
}

/** Of names and contents; what is built or installed is no source. */
function hashOf(paths) {
  const hash = createHash('sha256');
  const add = (path) => {
    if (!statSync(path).isDirectory()) {
      hash
        .update(`${relative(ROOT, path)}\0`)
        .update(readFileSync(path))
        .update('\0');
      return;
    }
    for (const name of readdirSync(path).sort()) {
      if (name !== 'dist' && name !== 'node_modules') add(join(path, name));
    }
  };
  paths.forEach(add);
  return hash.digest('hex');
}

// telling and running

/** Says what is done and for how long: one line that counts on a terminal, a line now and then elsewhere. */
async function withProgress(what, work) {
  const startedMs = Date.now();
  const seconds = () => Math.round((Date.now() - startedMs) / 1000);
  const terminal = process.stderr.isTTY === true;
  const tell = () => {
    if (terminal) process.stderr.write(`\r${what} … ${seconds()} s `);
    else process.stderr.write(`${what} … ${seconds()} s\n`);
    lineOpen = terminal;
  };
  tell();
  const timer = setInterval(tell, terminal ? 1_000 : 15_000);
  try {
    await work();
  } finally {
    clearInterval(timer);
  }
  if (!quiet || terminal) process.stderr.write(`${terminal ? '\r' : ''}${what} … done after ${seconds()} s\n`);
  lineOpen = false;
}

function endLine() {
  if (lineOpen) process.stderr.write('\n');
  lineOpen = false;
}

/** Runs a program to its end; its output is kept for the case that it fails. */
function run(program, words) {
  return new Promise((resolve) => {
    let output = '';
    const keep = (part) => (output = (output + part).slice(-20_000));
    running = spawn(program, words, { cwd: ROOT, stdio: ['ignore', 'pipe', 'pipe'] });
    running.stdout.on('data', keep);
    running.stderr.on('data', keep);
    running.on('error', (failure) => resolve({ code: 1, output: `${output}\n${failure.message}` }));
    running.on('close', (code) => {
      running = null;
      resolve({ code, output });
    });
  });
}

function sha256(bytes) {
  return createHash('sha256').update(bytes).digest('hex');
}

function readJson(path) {
  try {
    return JSON.parse(readFileSync(path, 'utf8'));
  } catch {
    return null; // missing or cut short: as if it were not there
  }
}
