# SPDX-License-Identifier: MIT
"""LAS files put together and taken apart byte by byte, without the package under test and without laspy.

Positions and sizes: ASPRS LAS 1.4 R15 (July 2019).
"""

import struct
from pathlib import Path

import numpy as np

DATA = Path(__file__).parent / "data"
SIZES = {0: 20, 1: 28, 2: 26, 3: 34, 4: 57, 5: 63, 6: 30, 7: 36, 8: 38, 9: 59, 10: 67}
HEADERS = {0: 227, 1: 227, 2: 227, 3: 235, 4: 375}
OLDEST = {0: 0, 1: 0, 2: 2, 3: 2, 4: 3, 5: 3, 6: 4, 7: 4, 8: 4, 9: 4, 10: 4}


def wall(n=400, seed=0):
    """Raw integers of a rough wall, 2 m x 2 m at a scale of 1 mm."""
    rng = np.random.default_rng(seed)
    return np.stack([rng.integers(0, 2000, n), rng.integers(-3, 4, n), rng.integers(0, 2000, n)], 1).astype("<i4")


def vlr(user, number, payload, text=b"", reserved=0):
    return struct.pack("<H16sHH32s", reserved, user.encode(), number, len(payload), text) + payload


def evlr(user, number, payload, text=b""):
    return struct.pack("<H16sHQ32s", 0, user.encode(), number, len(payload), text) + payload


def descriptor(name, code, options=0, text=b""):
    """One extra-bytes descriptor of 192 bytes (R15, table 24): type at 2, options at 3, name at 4, text at 160."""
    out = bytearray(192)
    out[2], out[3] = code, options
    out[4 : 4 + len(name)] = name.encode()
    out[160 : 160 + len(text)] = text
    return bytes(out)


def las(
    raw=None,
    *,
    fmt=0,
    minor=None,
    scale=0.001,
    offset=(0.0, 0.0, 0.0),
    vlrs=(),
    evlrs=(),
    extra=None,
    encoding=None,
    gap=b"",
    seed=0,
    program=b"by hand",
):
    """Return a whole uncompressed LAS file. Every byte of a record that is not a coordinate is random."""
    raw = wall(seed=seed) if raw is None else np.asarray(raw, "<i4")
    minor = OLDEST[fmt] if minor is None else minor
    n, length = len(raw), SIZES[fmt] + (0 if extra is None else extra.shape[1])
    rng = np.random.default_rng(seed + 1)
    records = rng.integers(0, 256, (n, length), dtype=np.uint8)
    records[:, :12] = raw.view(np.uint8).reshape(n, 12)
    records[:, 14] = 0x11 if fmt >= 6 else 0x09  # return 1 of 1
    records[:, 15] &= 0xFB if fmt >= 6 else 0x7F  # not withheld
    if extra is not None:
        records[:, SIZES[fmt] :] = extra
    size = HEADERS[minor]
    head = bytearray(size)
    head[:4] = b"LASF"
    wide = fmt >= 6
    struct.pack_into("<H", head, 6, (16 if wide else 0) if encoding is None else encoding)
    head[24], head[25] = 1, minor
    head[26:58], head[58:90] = b"SCANNER".ljust(32, b"\0"), program.ljust(32, b"\0")
    points_at = size + sum(map(len, vlrs)) + len(gap)
    struct.pack_into("<HHHIIBH", head, 90, 60, 2024, size, points_at, len(vlrs), fmt, length)
    struct.pack_into("<II", head, 107, 0 if wide else n, 0 if wide else n)
    high, low = raw.max(0) * scale + np.array(offset), raw.min(0) * scale + np.array(offset)
    struct.pack_into("<6d", head, 131, scale, scale, scale, *offset)
    struct.pack_into("<6d", head, 179, high[0], low[0], high[1], low[1], high[2], low[2])
    body_end = points_at + n * length
    if minor >= 4:
        struct.pack_into("<QIQQ", head, 235, body_end if evlrs else 0, len(evlrs), n, n)
    elif minor == 3 and evlrs:
        struct.pack_into("<Q", head, 227, body_end)
    return bytes(head) + b"".join(vlrs) + gap + records.tobytes() + b"".join(evlrs)


def take_apart(data):
    """Parse a LAS file into a dictionary of plain values; points stay as rows of bytes (None when compressed)."""
    minor = data[25]
    size, points_at, vlr_count, fmt, length = struct.unpack_from("<HIIBH", data, 94)
    out = {
        "encoding": struct.unpack_from("<H", data, 6)[0], "minor": minor, "system": data[26:58].rstrip(b"\0"),
        "program": data[58:90].rstrip(b"\0"), "day": struct.unpack_from("<HH", data, 90), "header_size": size,
        "points_at": points_at, "format": fmt & 0x3F, "compressed": bool(fmt & 0x80), "length": length,
        "legacy": struct.unpack_from("<6I", data, 107), "scaling": data[131:179],
        "bounds": struct.unpack_from("<6d", data, 179), "vlrs": [], "evlrs": [],
    }  # fmt: skip
    at = size
    for _ in range(vlr_count):
        number, payload = struct.unpack_from("<HH", data, at + 18)
        user = data[at + 2 : at + 18].split(b"\0")[0].decode()
        out["vlrs"].append((user, number, data[at : at + 54], data[at + 54 : at + 54 + payload]))
        at += 54 + payload
    out["gap"] = data[at:points_at]
    out["count"] = out["legacy"][0]
    if minor >= 3:
        out["waveform_at"] = struct.unpack_from("<Q", data, 227)[0]
    if minor >= 4:
        at, evlr_count, out["count"] = struct.unpack_from("<QIQ", data, 235)
        out["by_return"] = struct.unpack_from("<15Q", data, 255)
        for _ in range(evlr_count):
            number, payload = struct.unpack_from("<HQ", data, at + 18)
            user = data[at + 2 : at + 18].split(b"\0")[0].decode()
            out["evlrs"].append((user, number, data[at : at + 60], data[at + 60 : at + 60 + payload]))
            at += 60 + payload
    rows = None
    if not out["compressed"]:
        rows = np.frombuffer(data, np.uint8, out["count"] * length, points_at).reshape(-1, length)
    out["rows"] = rows
    out["fields"] = descriptors(out)
    return out


def descriptors(parts):
    """Return {name: (type, options, no_data, least, most, text, start in the record)} from record LASF_Spec 4."""
    sizes = {1: 1, 2: 1, 3: 2, 4: 2, 5: 4, 6: 4, 7: 8, 8: 8, 9: 4, 10: 8}
    found, at = {}, SIZES[parts["format"]]
    for user, number, _, payload in parts["vlrs"]:
        if (user, number) != ("LASF_Spec", 4):
            continue
        for start in range(0, len(payload), 192):
            d = payload[start : start + 192]
            code, options = d[2], d[3]
            name = d[4:36].split(b"\0")[0].decode()
            found[name] = (code, options, d[40:48], d[64:72], d[88:96], d[160:192].split(b"\0")[0], at)
            at += options if code == 0 else sizes[(code - 1) % 10 + 1] * ((code - 1) // 10 + 1)
    return found
