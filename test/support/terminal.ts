import { spawn } from 'node:child_process';

/** A terminal with bash in it, into which commands are typed one block after the other. */
export interface Terminal {
  /**
   * Types a block and waits until the shell asks for the next one; what was put into the background goes on.
   *
   * @throws where its last command fails, or the shell ends
   */
  type(block: string): Promise<void>;
  output(): string;
  /** Closes it; what still runs in it ends with it. */
  close(): Promise<void>;
}

const OUTPUT_KEPT = 200_000;

/** @param cwd the folder it begins in */
export function openTerminal(cwd: string): Terminal {
  // `script` (util-linux) lends it a real terminal: there each job is a group of its own, and `kill %1` means all of it.
  const bash = '/bin/bash --norc --noprofile --noediting -i';
  const shell = spawn('script', ['--quiet', '--flush', '--return', '--command', bash, '/dev/null'], {
    cwd,
    stdio: ['pipe', 'pipe', 'pipe'],
  });
  let output = '';
  let blocks = 0;
  let look = (): void => {};
  const keep = (part: Buffer): void => {
    output = (output + part.toString()).slice(-OUTPUT_KEPT);
    look();
  };
  shell.stdout.on('data', keep);
  shell.stderr.on('data', keep);
  const ended = new Promise<void>((resolve) => shell.once('close', () => resolve()));
  shell.stdin.write('trap \'for job in $(jobs -p); do kill -- -"$job"; done 2>/dev/null\' EXIT\n');
  return {
    async type(block) {
      blocks += 1;
      const mark = `:: block ${blocks} ended with `;
      const status = new Promise<number>((resolve) => {
        look = () => {
          const found = output.indexOf(mark);
          const code = found < 0 ? null : /^(\d+)\s/.exec(output.slice(found + mark.length));
          if (code) resolve(Number(code[1]));
        };
      });
      // Written so that the mark itself is not in what is typed.
      shell.stdin.write(`${block.trimEnd()}\necho ":: block ${blocks} ended"" with $?"\n`);
      const code = await Promise.race([status, ended.then(() => null)]);
      if (code !== 0) throw new Error(`the block ended with ${code ?? 'the shell'}\n${block}\n${output.slice(-4000)}`);
    },
    output: () => output,
    async close() {
      shell.stdin.write('exit\nexit\n'); // the first only warns where jobs still run
      shell.stdin.end();
      await ended;
    },
  };
}
