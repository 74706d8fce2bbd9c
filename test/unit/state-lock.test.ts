import { type ChildProcess, spawn } from 'node:child_process';
import { mkdir, mkdtemp, readdir, readFile, rm, stat, writeFile } from 'node:fs/promises';
import { createServer } from 'node:net';
import { tmpdir } from 'node:os';
import { join } from 'node:path';
import { afterEach, beforeEach, describe, expect, test } from 'vitest';
import { lockState } from '../../coordinator/service/state-lock.js';

let folder: string;
beforeEach(async () => {
  folder = await mkdtemp(join(tmpdir(), 'commonfit-lock-'));
});
afterEach(() => rm(folder, { recursive: true, force: true }));

async function locked(at = folder, pid = process.pid): Promise<() => Promise<void>> {
  const lock = await lockState(at, pid);
  if (!lock.ok) throw new Error(lock.failure.message);
  return lock.value;
}

const TAKEN = {
  ok: false,
  failure: { code: 'state-unwritable', message: expect.stringContaining('uses this') },
};

test('one owner at a time, whatever the number of its process', async () => {
  const release = await locked(folder, 1);
  expect(await lockState(folder, 1)).toMatchObject(TAKEN);
  expect(await lockState(folder, 2)).toMatchObject({
    failure: {
      message: expect.stringMatching(/^Process 1 uses/),
      where: { file: join(folder, 'coordinator.sock') },
    },
  });
  await release();
  await (await locked(folder, 1))();
});

test('once given free, nothing of it is left', async () => {
  const release = await locked();
  expect((await readdir(folder)).sort()).toEqual(['coordinator.pid', 'coordinator.sock']);
  expect(await readFile(join(folder, 'coordinator.pid'), 'utf8')).toBe(`${process.pid}\n`);
  for (const name of await readdir(folder)) expect((await stat(join(folder, name))).mode & 0o777).toBe(0o600);
  await release();
  expect(await readdir(folder)).toEqual([]);
});

test('of many that start at once one gets the folder', async () => {
  const locks = await Promise.all(Array.from({ length: 8 }, (_, i) => lockState(folder, i + 1)));
  const owners = locks.flatMap((lock) => (lock.ok ? [lock.value] : []));
  expect(owners).toHaveLength(1);
  await owners[0]();
});

test('a folder of a long path', async () => {
  const deep = join(folder, ...Array.from({ length: 8 }, () => 'a-folder-of-the-regional-utilities'));
  await mkdir(deep, { recursive: true });
  const release = await locked(deep);
  expect(await lockState(deep, 2)).toMatchObject(TAKEN);
  await release();
});

describe('what a dead coordinator left behind is taken over', () => {
  test('though its number is now that of a process that lives', async () => {
    await writeFile(join(folder, 'coordinator.pid'), `${process.ppid}\n`);
    await (await locked())();
  });

  test('its socket too', async () => {
    // A process that is killed does not remove its socket.
    const killed: ChildProcess = spawn(process.execPath, [
      '-e',
      `require('node:net').createServer().listen(${JSON.stringify(join(folder, 'coordinator.sock'))}, () => console.log('up'))`,
    ]);
    await new Promise((resolve) => killed.stdout?.once('data', resolve));
    expect(await lockState(folder, 7)).toMatchObject(TAKEN);
    const gone = new Promise((resolve) => killed.once('close', resolve));
    killed.kill('SIGKILL');
    await gone;
    expect(await readdir(folder)).toEqual(['coordinator.sock']);
    await (await locked())();
  });
});

test('an owner that does not look up (stopped, swamped) still owns the folder', async () => {
  const deaf = createServer();
  await new Promise<void>((resolve) => deaf.listen(join(folder, 'coordinator.sock'), resolve));
  expect(await lockState(folder, 7)).toMatchObject({
    failure: { message: expect.stringContaining('Another process uses this state folder') },
  });
  await new Promise((resolve) => deaf.close(resolve));
});

test('a folder that is not there, and one that is a file', async () => {
  expect(await lockState(join(folder, 'none'), 1)).toMatchObject({ failure: { code: 'state-unwritable' } });
  await writeFile(join(folder, 'file'), '');
  expect(await lockState(join(folder, 'file'), 1)).toMatchObject({ failure: { code: 'state-unwritable' } });
});
