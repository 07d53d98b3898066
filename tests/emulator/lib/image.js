// Reads what is flashed: an ELF or a UF2 file, as bytes at flash addresses.

import { readFileSync } from 'node:fs';

const FLASH = 0x10000000;
const FLASH_SIZE = 2 * 1024 * 1024;

/** The image as { flash, symbols }: 2 MiB of flash content, and (from an ELF only) addresses by symbol name. */
export function readImage(path) {
  const file = readFileSync(path);
  const flash = new Uint8Array(FLASH_SIZE).fill(0xff);
  const put = (address, bytes) => {
    if (address < FLASH || address + bytes.length > FLASH + FLASH_SIZE) {
      throw new Error(`${path}: content at 0x${address.toString(16)} is not in the flash`);
    }
    flash.set(bytes, address - FLASH);
  };
  if (file.readUInt32LE(0) === 0x464c457f) readElf(file, put);
  else if (file.readUInt32LE(0) === 0x0a324655) readUf2(file, path, put);
  else throw new Error(`${path} is neither an ELF nor a UF2 file`);
  return flash;
}

function readElf(file, put) {
  const offset = file.readUInt32LE(28);
  const size = file.readUInt16LE(42);
  for (let i = 0; i < file.readUInt16LE(44); i++) {
    const at = offset + i * size;
    const length = file.readUInt32LE(at + 16);
    if (file.readUInt32LE(at) !== 1 || length === 0) continue;
    const from = file.readUInt32LE(at + 4);
    put(file.readUInt32LE(at + 12), file.subarray(from, from + length));
  }
}

function readUf2(file, path, put) {
  for (let at = 0; at < file.length; at += 512) {
    const family = file.readUInt32LE(at + 28);
    if (file.readUInt32LE(at + 508) !== 0x0ab16f30 || family !== 0xe48bff56) {
      throw new Error(`${path}: block ${at / 512} is not an RP2040 block`);
    }
    const length = file.readUInt32LE(at + 16);
    put(file.readUInt32LE(at + 12), file.subarray(at + 32, at + 32 + length));
  }
}
