"""Damaged NIfTI and NRRD files."""

from __future__ import annotations

import struct
import zlib

import nibabel as nib
import numpy as np
from damaged_case import HERE, Case, cut, put, screened, zeros_packed
from sound_files import nifti_bytes, nrrd_bytes, pack, pair_bytes

# offsets of the official nifti1.h and nifti2.h
ONE = {"sizeof": 0, "dim": 40, "datatype": 70, "bitpix": 72, "pixdim": 76, "offset": 108, "slope": 112,
       "codes": 252, "quatern": 256, "srow": 280, "magic": 344, "end": 352,
       "dims": "<h", "reals": "<f", "offsets": "<f", "code": "<h"}  # fmt: skip
TWO = {"sizeof": 0, "dim": 16, "datatype": 12, "bitpix": 14, "pixdim": 104, "offset": 168, "slope": 176,
       "codes": 344, "quatern": 352, "srow": 400, "magic": 4, "end": 544,
       "dims": "<q", "reals": "<d", "offsets": "<q", "code": "<i"}  # fmt: skip


def nifti_header_damages(data, at, *, apart=False):
    """Damages of the header alone, each of which contradicts the rest of the file or itself."""
    dims, reals = at["dims"], at["reals"]
    wide, real = struct.calcsize(dims), struct.calcsize(reals)

    def dim(n, value):
        return put(data, at["dim"] + n * wide, dims, value)

    def row(n, *values):
        return put(data, at["srow"] + n * real, f"<{len(values)}{reals[-1]}", *values)

    made = {
        "sizeof 0": put(data, at["sizeof"], "<i", 0),
        "sizeof odd": put(data, at["sizeof"], "<i", 349),
        "magic": put(data, at["magic"], "4s", b"n+9\0"),
        "no dimensions": dim(0, 0),
        "nine dimensions": dim(0, 9),
        "minus one dimension": dim(0, -1),
        "dimension 0": dim(1, 0),
        "dimension negative": dim(2, -13),
        "one more slice": dim(3, 15),
        "one slice fewer": dim(3, 13),
        "twice as wide": dim(1, 24),
        "huge": put(data, at["dim"] + wide, f"<3{dims[-1]}", 32767, 32767, 32767),
        "type unknown": put(data, at["datatype"], "<h", 77),
        "type of eight bytes": put(data, at["datatype"], "<hh", 64, 64),
        "type of one byte": put(data, at["datatype"], "<hh", 2, 8),
        "bits contradict": put(data, at["bitpix"], "<h", 32),
        "slope infinite": put(data, at["slope"], reals, np.inf),
        "affine NaN": row(0, np.nan),
        "affine infinite": row(5, np.inf),
        "affine zero": row(0, *[0.0] * 12),
        "affine flat": row(0, *[2.0, 0, 0, 0, 4.0, 0, 0, 0, 0, 0, 3.0, 0]),
        "origin NaN": row(11, np.nan),
        "spacing 0": put(data, at["pixdim"] + real, reals, 0.0),
        "spacing negative": put(data, at["pixdim"] + 2 * real, reals, -2.5),
        "spacing NaN": put(data, at["pixdim"] + 3 * real, reals, np.nan),
        "spacing infinite": put(data, at["pixdim"] + real, reals, np.inf),
        "quaternion": put(
            put(data, at["codes"], f"<2{at['code'][-1]}", 1, 0),
            at["quatern"],
            f"<3{reals[-1]}",
            0.9,
            0.9,
            0.9,
        ),
        "offset beyond": put(data, at["offset"], at["offsets"], 2**29),
        "offset vast": put(data, at["offset"], at["offsets"], 2**60),
        "offset negative": put(data, at["offset"], at["offsets"], -8),
    }
    if at is ONE:
        made["offset NaN"] = put(data, at["offset"], "<f", np.nan)
        made["offset broken"] = put(data, at["offset"], "<f", 352.5)
    if not apart:
        made["offset in the header"] = put(data, at["offset"], at["offsets"], 40)
    return made


def nifti_cases():
    one, two = nifti_bytes(nib.Nifti1Image), nifti_bytes(nib.Nifti2Image)
    packed = pack(one)
    made = {f"nifti1/{k}": ("x.nii", v) for k, v in nifti_header_damages(one, ONE).items()}
    made |= {f"nifti2/{k}": ("x.nii", v) for k, v in nifti_header_damages(two, TWO).items()}
    picks = ("huge", "affine NaN", "twice as wide", "one slice fewer", "no dimensions", "offset beyond")
    made |= {f"nifti1 packed/{k}": ("x.nii.gz", pack(nifti_header_damages(one, ONE)[k])) for k in picks}
    for name, data, ending in (
        ("nifti1", one, "nii"),
        ("nifti2", two, "nii"),
        ("nifti1 packed", packed, "nii.gz"),
    ):
        for share in (0, 0.002, 0.05, 0.3, 0.9, 0.999):
            made[f"{name}/cut at {share}"] = (f"x.{ending}", cut(data, share))
        made[f"{name}/one byte less"] = (f"x.{ending}", data[:-1])
    made["nifti1/bytes after the voxels"] = ("x.nii", one + b"more")
    made["nifti1 packed/checksum"] = ("x.nii.gz", packed[:-8] + bytes(8))
    made["nifti1 packed/twice"] = ("x.nii.gz", pack(packed))
    for n, at in enumerate(np.linspace(20, len(packed) - 20, 6).astype(int)):
        made[f"nifti1 packed/bits {n}"] = ("x.nii.gz", packed[:at] + b"\xff\x00\xff" + packed[at + 3 :])
    vast = put(put(one, 42, "<hhh", 1000, 1000, 1000), 70, "<hh", 64, 64)[:352]
    packer = zlib.compressobj(9, zlib.DEFLATED, -15)
    front = packer.compress(vast) + packer.flush(zlib.Z_FULL_FLUSH)
    bomb = zeros_packed(7700)
    made["nifti1 packed/bomb of 8 GB"] = ("x.nii.gz", bomb[:10] + front + bomb[10:])
    made["nifti1 packed/more than claimed"] = ("x.nii.gz", pack(one + bytes(2**22)))
    for word in (b"", b"\0" * 400, b"hello, no scan at all " * 40, b"\x1f\x8b", b"PK\x03\x04" + bytes(400)):
        made[f"nifti1/no scan {len(made)}"] = ("x.nii", word)
    return [Case(name, {file: data}, screened(file)) for name, (file, data) in made.items()]


def pair_cases():
    header, voxels = pair_bytes()
    spoilt = nifti_header_damages(header, ONE, apart=True)
    picks = ("huge", "affine NaN", "spacing 0", "one more slice", "one slice fewer", "type unknown")
    made = {k: (spoilt[k], voxels) for k in (*picks, "offset beyond")}
    made |= {
        "voxels cut": (header, voxels[:-1]),
        "voxels longer": (header, voxels + b"1"),
        "voxels empty": (header, b""),
        "header cut": (header[:300], voxels),
        "header empty": (b"", voxels),
        "swapped": (voxels, header),
        "packed voxels cut": (header, pack(voxels)[:-20]),
    }
    cases = [Case(f"pair/{k}", {"x.hdr": made[k][0], "x.img": made[k][1]}, screened("x.hdr")) for k in made]
    cases.append(Case("pair/no voxels", {"x.hdr": header}, screened("x.hdr")))
    cases.append(Case("pair/no header", {"x.img": voxels}, screened("x.img")))
    return cases


def line(data, field_name, value):
    """The header line of a field, replaced (or taken out, for None)."""
    head, _, body = data.partition(b"\n\n")
    kept = [row for row in head.split(b"\n") if not row.startswith(field_name.encode() + b":")]
    if value is not None:
        kept.append(f"{field_name}: {value}".encode())
    return b"\n".join(kept) + b"\n\n" + body


def nrrd_cases(folder):
    raw, packed, text = (nrrd_bytes(folder, encoding=e) for e in ("raw", "gzip", "ascii"))
    head = packed.partition(b"\n\n")[0] + b"\n\n"
    made = {
        "magic": raw.replace(b"NRRD000", b"NRRDOOO", 1),
        "version": raw.replace(b"NRRD0005", b"NRRD0009", 1).replace(b"NRRD0004", b"NRRD0009", 1),
        **{f"no {k}": line(raw, k, None) for k in ("type", "dimension", "sizes", "encoding", "endian")},
        "sizes short": line(raw, "sizes", "12 13"),
        "sizes of words": line(raw, "sizes", "a b c"),
        "size 0": line(raw, "sizes", "12 0 14"),
        "size negative": line(raw, "sizes", "12 -13 14"),
        "one more slice": line(raw, "sizes", "12 13 15"),
        "one slice fewer": line(raw, "sizes", "12 13 13"),
        "huge": line(raw, "sizes", "100000 100000 100000"),
        "beyond numbers": line(raw, "sizes", "1e300 13 14"),
        "dimension 300": line(raw, "dimension", "300"),
        "dimension of words": line(raw, "dimension", "three"),
        "type unknown": line(raw, "type", "int128"),
        "type of eight bytes": line(raw, "type", "double"),
        "encoding hex": line(raw, "encoding", "hex"),
        "encoding wrong": line(raw, "encoding", "gzip"),
        "endian odd": line(raw, "endian", "middle"),
        "directions NaN": line(raw, "space directions", "(nan,0,0) (0,1,0) (0,0,1)"),
        "directions zero": line(raw, "space directions", "(0,0,0) (0,0,0) (0,0,0)"),
        "directions flat": line(raw, "space directions", "(1,0,0) (2,0,0) (0,0,1)"),
        "directions infinite": line(raw, "space directions", "(1e999,0,0) (0,1,0) (0,0,1)"),
        "two directions": line(raw, "space directions", "(1,0,0) (0,1,0)"),
        "directions of two": line(raw, "space directions", "(1,0) (0,1) (1,1)"),
        "directions unclosed": line(raw, "space directions", "(1,0,0 (0,1,0) (0,0,1)"),
        "origin NaN": line(raw, "space origin", "(nan,0,0)"),
        "origin of two": line(raw, "space origin", "(1,2)"),
        "kinds too many": line(raw, "kinds", "domain domain domain domain"),
        "units unclosed": line(raw, "space units", '"mm" "mm'),
        "skips back": line(raw, "byte skip", "-9"),
        "skips far": line(raw, "byte skip", "99999999"),
        "skips lines": line(raw, "line skip", "999"),
        "a field twice": raw.replace(b"\n\n", b"\nsizes: 12 13 14\n\n", 1),
        "no colon": raw.replace(b"\n\n", b"\nnothing\n\n", 1),
        "no empty line": raw.replace(b"\n\n", b"\n", 1)[:300],
        "elsewhere": line(raw, "data file", "/etc/hostname"),
        "upwards": line(raw, "data file", "../x.raw"),
        "list of files": line(raw, "data file", "LIST"),
        "no such data": line(raw, "data file", "gone.raw"),
        "longer": raw + b"1",
        **{f"cut at {share}": cut(raw, share) for share in (0, 0.001, 0.03, 0.5, 0.999)},
        **{f"packed cut at {share}": cut(packed, share) for share in (0.5, 0.8, 0.99)},
        "packed checksum": packed[:-8] + bytes(8),
        "packed damaged": packed[:-60] + b"\xff" * 40 + packed[-20:],
        "packed bomb": line(head, "sizes", "1000 1000 1000") + zeros_packed(2000),
        "packed longer": head + zeros_packed(64),
        "text cut": cut(text, 0.8),
        "text of words": text[:-20] + b" liver spleen kidney",
        "text too large": text[:-4] + b" 9e9",
    }  # fmt: skip
    cases = [Case(f"nrrd/{name}", {"x.nrrd": data}, screened("x.nrrd")) for name, data in made.items()]
    header = nrrd_bytes(folder, encoding="raw", detached=True)
    voxels = (folder / "x.raw").read_bytes()
    apart = {
        "voxels cut": (header, voxels[:-1]),
        "voxels longer": (header, voxels + b"1"),
        "voxels empty": (header, b""),
        "header cut": (cut(header, 0.5), voxels),
        "another encoding": (line(header, "encoding", "bzip2"), voxels),
        "huge": (line(header, "sizes", "9000 9000 9000"), voxels),
    }
    cases += [Case(f"nhdr/{k}", {"x.nhdr": h, "x.raw": v}, screened("x.nhdr")) for k, (h, v) in apart.items()]
    return cases


def component_cases(through):
    """Vectors and tensors: cut short, more or fewer components than claimed, fields, damaged numbers."""
    grid = np.diag([2.0, 2, 2, 1])
    cases = []
    for kind, intent, n in (("vectors", 1007, 3), ("tensors", 1005, 6)):
        image = nib.Nifti1Image(np.ones((8, 7, 6, 1, n), np.float32), grid)
        image.header["intent_code"] = intent
        image.header.set_xyzt_units("mm")
        sound = image.to_bytes()
        unreadable = {f"cut at {share}": cut(sound, share) for share in (0.02, 0.3, 0.99)}
        unreadable["one byte less"] = sound[:-1]
        unreadable["one component more"] = put(sound, 50, "<h", n + 1)
        unreadable["one component less"] = put(sound, 50, "<h", n - 1)
        unreadable["affine NaN"] = put(sound, 280, "<f", np.nan)
        refused = {
            "infinite": put(sound, 356, "<f", np.inf),
            "half defined": put(sound, 356, "<f", np.nan),
            "a field": put(sound, 68, "<h", 1006),
            "of another kind": put(sound, 68, "<h", 1005 if n == 3 else 1007),
        }
        for told, status in ((unreadable, (3, 1)), (refused, (1,))):
            for name, data in told.items():
                arguments = ["carry", f"{HERE}/x.nii", "--through", through, "--out", f"{HERE}/out.nii"]
                arguments += ["--as", kind, "--rule", "turn", "--belongs-to", "source", "--quiet"]
                cases.append(Case(f"{kind}/{name}", {"x.nii": data}, arguments, statuses=status))
    return cases
