"""Decodes an 8-bit RGB PNG by the format's specification and compares it with raw pixels.

Usage: png_pixels.py FILE WIDTH HEIGHT RGB_FILE
"""
import struct
import sys
import zlib


def chunks(data):
    assert data[:8] == b"\x89PNG\r\n\x1a\n"
    at = 8
    while at < len(data):
        (length,) = struct.unpack(">I", data[at : at + 4])
        kind, body = data[at + 4 : at + 8], data[at + 8 : at + 8 + length]
        (crc,) = struct.unpack(">I", data[at + 8 + length : at + 12 + length])
        assert crc == zlib.crc32(kind + body)
        yield kind, body
        at += 12 + length


def paeth(a, b, c):
    p = a + b - c
    distance, value = min((abs(p - a), 0), (abs(p - b), 1), (abs(p - c), 2))
    return (a, b, c)[value]


def rows(scanlines, width, height):
    above = bytearray(3 * width)
    for y in range(height):
        line = scanlines[y * (3 * width + 1) : (y + 1) * (3 * width + 1)]
        kind, row = line[0], bytearray(line[1:])
        for i in range(3 * width):
            left = row[i - 3] if i >= 3 else 0
            corner = above[i - 3] if i >= 3 else 0
            predicted = (0, left, above[i], (left + above[i]) // 2, paeth(left, above[i], corner))
            row[i] = (row[i] + predicted[kind]) & 255
        yield bytes(row)
        above = row


def main():
    path, width, height, raw = sys.argv[1], int(sys.argv[2]), int(sys.argv[3]), sys.argv[4]
    with open(path, "rb") as file:
        parts = list(chunks(file.read()))
    header = dict(parts)[b"IHDR"]
    assert struct.unpack(">IIBBBBB", header) == (width, height, 8, 2, 0, 0, 0), header
    packed = b"".join(body for kind, body in parts if kind == b"IDAT")
    with open(raw, "rb") as file:
        assert b"".join(rows(zlib.decompress(packed), width, height)) == file.read()


main()
