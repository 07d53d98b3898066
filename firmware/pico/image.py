#!/usr/bin/env python3
"""Makes the UF2 file of a linked image, reads it back, and prints what the image takes of flash and RAM.

usage: image.py ELF UF2

ELF layout: System V ABI, 32-bit little endian. UF2: the published format specification (512-byte blocks, 256 bytes of
content each, magic numbers and RP2040's family number as listed there). Nothing but Python's own library is needed.
"""

import struct
import sys
from pathlib import Path

MAGIC_START = (0x0A324655, 0x9E5D5157)
MAGIC_END = 0x0AB16F30
FAMILY_PRESENT = 0x00002000
RP2040 = 0xE48BFF56
PAGE = 256
BLOCK = 512
FLASH = range(0x10000000, 0x10000000 + 2 * 1024 * 1024 - 24 * 1024)
RAM = range(0x20000000, 0x20042000)
FLAG_WRITE, FLAG_ALLOC = 1, 2
NOBITS = 8
SYMTAB = 2

# What the image may take, bytes.
MOST_FLASH = 96 * 1024
MOST_RAM_BESIDE_JOURNAL = 24 * 1024


class Bad(Exception):
    """The image is not what it should be."""


def read_elf(path):
    data = path.read_bytes()
    if data[:7] != b"\x7fELF\x01\x01\x01":
        raise Bad(f"{path} is not a 32-bit little-endian ELF file")
    (ph_off, sh_off) = struct.unpack_from("<II", data, 28)
    (ph_size, ph_count, sh_size, sh_count, names_index) = struct.unpack_from("<5H", data, 42)
    segments = []
    for i in range(ph_count):
        kind, offset, _, physical, size = struct.unpack_from("<5I", data, ph_off + i * ph_size)
        if kind == 1 and size:
            segments.append((physical, data[offset : offset + size]))
    raw = [struct.unpack_from("<10I", data, sh_off + i * sh_size) for i in range(sh_count)]
    symbols = next((section for section in raw if section[1] == SYMTAB), None)
    names = raw[names_index]
    sections = []
    for name, kind, flags, address, _, size, *_ in raw:
        start = names[4] + name
        text = data[start : data.index(b"\0", start)].decode()
        if flags & FLAG_ALLOC and size:
            sections.append((text, kind, address, size))
    return segments, sections, size_of_journal(data, raw, symbols) if symbols else 0


def size_of_journal(data, raw, symbols):
    """The journal's static, by its symbol: it is what the RAM is for, and is counted apart."""
    names = raw[symbols[6]][4]
    total = 0
    for at in range(symbols[4], symbols[4] + symbols[5], 16):
        name, address, size = struct.unpack_from("<III", data, at)
        start = names + name
        if address in RAM and b"JOURNAL" in data[start : data.index(b"\0", start)]:
            total += size
    return total


def pages_of(segments):
    pages = {}
    for address, content in segments:
        if address not in FLASH or address + len(content) - 1 not in FLASH:
            raise Bad(f"a segment at {address:#010x} of {len(content)} bytes lies outside the program's part of the flash")
        for index, byte in enumerate(content):
            page = (address + index) // PAGE * PAGE
            pages.setdefault(page, bytearray(b"\xff" * PAGE))[(address + index) % PAGE] = byte
    return pages


def write_uf2(pages, path):
    blocks = []
    for number, address in enumerate(sorted(pages)):
        head = struct.pack("<8I", *MAGIC_START, FAMILY_PRESENT, address, PAGE, number, len(pages), RP2040)
        blocks.append(head + pages[address] + bytes(BLOCK - 32 - PAGE - 4) + struct.pack("<I", MAGIC_END))
    path.write_bytes(b"".join(blocks))


def read_uf2(path):
    data = path.read_bytes()
    if len(data) % BLOCK:
        raise Bad(f"{path} is not a whole number of blocks")
    pages = {}
    count = len(data) // BLOCK
    for number in range(count):
        block = data[number * BLOCK : (number + 1) * BLOCK]
        first, second, flags, address, size, at, total, family = struct.unpack_from("<8I", block)
        end = struct.unpack_from("<I", block, BLOCK - 4)[0]
        expected = (*MAGIC_START, FAMILY_PRESENT, PAGE, number, count, RP2040, MAGIC_END)
        if (first, second, flags, size, at, total, family, end) != expected or address % PAGE or address in pages:
            raise Bad(f"block {number} of {path} is malformed")
        pages[address] = block[32 : 32 + size]
    return pages


def print_use(sections, journal, pages):
    flash = ram = 0
    print(f"{'section':<16}{'address':>12}{'bytes':>10}")
    for name, kind, address, size in sections:
        print(f"{name:<16}{address:>#12x}{size:>10}")
        if address in RAM:
            ram += size
            if kind != NOBITS:
                flash += size  # initial values
        else:
            flash += size
    print(f"flash {flash} bytes ({flash / 1024:.1f} KiB) in {len(pages)} UF2 blocks")
    print(
        f"static RAM {ram} bytes ({ram / 1024:.1f} KiB) of {len(RAM) // 1024} KiB: "
        f"journal {journal}, everything else {ram - journal}; the stack has the other {len(RAM) - ram}"
    )
    if flash > MOST_FLASH:
        raise Bad(f"the image takes {flash} bytes of flash; {MOST_FLASH} are allowed")
    if ram - journal > MOST_RAM_BESIDE_JOURNAL:
        raise Bad(f"static RAM beside the journal is {ram - journal} bytes; {MOST_RAM_BESIDE_JOURNAL} are allowed")


def main():
    elf, uf2 = Path(sys.argv[1]), Path(sys.argv[2])
    segments, sections, journal = read_elf(elf)
    pages = pages_of(segments)
    write_uf2(pages, uf2)
    back = read_uf2(uf2)
    if back != {address: bytes(page) for address, page in pages.items()}:
        raise Bad(f"{uf2} does not read back as it was written")
    for address, content in segments:
        got = b"".join(back[page] for page in range(address // PAGE * PAGE, address + len(content), PAGE))
        if got[address % PAGE :][: len(content)] != content:
            raise Bad(f"{uf2} does not hold the segment at {address:#010x}")
    print_use(sections, journal, pages)
    print(f"{uf2.name} reads back as the image, byte for byte")


if __name__ == "__main__":
    if len(sys.argv) != 3:
        sys.exit(__doc__)
    try:
        main()
    except (Bad, OSError, struct.error) as error:
        sys.exit(f"image.py: {error}")
