"""Damaged landmark files, guides, tables of names and map folders."""

from __future__ import annotations

import json

from damaged_case import HERE, Case, cut
from sound_files import map_folder_bytes, pack

POINTS = "name,x_mm,y_mm,z_mm\n"
TABLES = {
    "empty": b"",
    "header alone": POINTS.encode(),
    "no header": b"a,1,2,3\n",
    "a column missing": b"name,x_mm,y_mm\na,1,2\n",
    "a word": f"{POINTS}a,1,zwei,3\n".encode(),
    "NaN": f"{POINTS}a,1,nan,3\n".encode(),
    "infinite": f"{POINTS}a,1,2,inf\n".encode(),
    "short row": f"{POINTS}a,1,2\n".encode(),
    "twice": f"{POINTS}a,1,2,3\na,4,5,6\n".encode(),
    "role": f"{POINTS[:-1]},role\na,1,2,3,boss\n".encode(),
    "sd": f"{POINTS[:-1]},sd_mm\na,1,2,3,-1\n".encode(),
    "latin": f"{POINTS}\xe9,1,2,3\n".encode("latin-1"),
    "zero bytes": f"{POINTS}a,1,2,3\n".encode() + bytes(64),
    "utf-16": f"{POINTS}a,1,2,3\n".encode("utf-16"),
    "packed": pack(f"{POINTS}a,1,2,3\n".encode()),
    "a quote unclosed": f'{POINTS}"a,1,2,3\nb,1,2,3\n'.encode(),
    "no name": f"{POINTS},1,2,3\n".encode(),
    "a number of pages": f"{POINTS}a,1{'0' * 5000},2,3\n".encode(),
}
MEASURED = "name,x_mm,y_mm,z_mm,t1_ms,flow_x_ml,flow_y_ml,flow_z_ml\na,1,2,3,900,1,0,0\n"
MEASUREMENTS = {
    "header alone": MEASURED.splitlines()[0].encode() + b"\n",
    "a component missing": MEASURED.replace(",flow_y_ml", ",flow_y").encode(),
    "a unit missing": MEASURED.replace("t1_ms", "t1_").encode(),
    "twice": MEASURED.replace("t1_ms", "flow_x_ml").encode(),
    "short row": f"{MEASURED}b,1,2,3\n".encode(),
    "long row": f"{MEASURED}b,1,2,3,4,5,6,7,8,9\n".encode(),
    "a word": f"{MEASURED}b,1,2,3,old,1,0,0\n".encode(),
    "no place": f"{MEASURED}b,1,,3,900,1,0,0\n".encode(),
    "infinite": f"{MEASURED}b,1,2,3,inf,1,0,0\n".encode(),
    "latin": f"{MEASURED}\xe9,1,2,3,900,1,0,0\n".encode("latin-1"),
    "zero bytes": MEASURED.encode() + bytes(64),
    "packed": pack(MEASURED.encode()),
    "a quote unclosed": f'{MEASURED}"b,1,2,3,900,1,0,0\nc,1,2,3,900,1,0,0\n'.encode(),
    "a number of pages": f"{MEASURED}b,1{'0' * 5000},2,3,900,1,0,0\n".encode(),
    "a line of megabytes": f"{MEASURED}{'b' * 2**23},1,2,3,900,1,0,0\n".encode(),
}
LINE = "line,x_mm,y_mm,z_mm\na,1,2,3\na,2,2,3\n"
LINES = {
    "header alone": LINE.splitlines()[0].encode() + b"\n",
    "one point": f"{LINE}b,1,2,3\n".encode(),
    "in two places": f"{LINE}b,1,2,3\nb,2,2,3\na,3,2,3\n".encode(),
    "no line": f"{LINE},1,2,3\n".encode(),
    "NaN": f"{LINE}a,1,nan,3\n".encode(),
    "a word": f"{LINE}a,1,two,3\n".encode(),
    "a column more": f"{LINE}a,1,2,3,4\n".encode(),
    "another header": LINE.replace("z_mm", "depth_mm").encode(),
    "zero bytes": LINE.encode() + bytes(64),
}
NAMES = {
    "empty": b"",
    "no columns": b"1\tliver\n",
    "no index": b"number\tname\n1\tliver\n",
    "a word": b"index\tname\none\tliver\n",
    "negative": b"index\tname\n-1\tliver\n",
    "too large": b"index\tname\n70000\tliver\n",
    "fraction": b"index\tname\n1.5\tliver\n",
    "twice": b"index\tname\n1\tliver\n1\tspleen\n",
    "short row": b"index\tname\n1\n",
    "no name": b"index\tname\n1\t\n",
    "latin": "index\tname\n1\tl\xe9ver\n".encode("latin-1"),
    "utf-16": "index\tname\n1\tliver\n".encode("utf-16"),
    "packed": pack(b"index\tname\n1\tliver\n"),
    "zero bytes": b"index\tname\n1\tliver\n" + bytes(64),
}


GATES = {
    "empty": b"",
    "no TOML": b"schema = volmap",
    "another schema": b'schema = "volmap-gates/9"\n',
    "no gates": b'schema = "volmap-gates/1"\nname = "mine"\n',
    "a gate of another kind": b'schema = "volmap-gates/1"\nname = "mine"\ngate = 3\n',
    "latin": b'schema = "volmap-gates/1"\nname = "m\xefne"\n',
}


def table_cases(source, target, through):
    pairs = POINTS[:-1] + ",to_x_mm,to_y_mm,to_z_mm\n"
    guides = {name: data.replace(POINTS.encode(), pairs.encode()) for name, data in TABLES.items()}
    cases = [
        Case(
            f"landmarks/{name}",
            {"x.csv": data},
            ["carry", f"{HERE}/x.csv", "--through", through, "--out", f"{HERE}/out.csv", "--quiet"],
        )
        for name, data in TABLES.items()
    ]
    said = ["--rule", "t1=value", "--rule", "flow=turn"]
    for kind, made, rules in (("measurements", MEASUREMENTS, said), ("lines", LINES, [])):
        cases += [
            Case(
                f"{kind}/{name}",
                {"x.csv": data},
                ["carry", f"{HERE}/x.csv", "--through", through, "--out", f"{HERE}/y.csv", "--quiet", *rules],
            )
            for name, data in made.items()
        ]
    cases += [
        Case(
            f"guides/{name}",
            {"x.csv": guides[name]},
            ["map", source, target, "--guides", f"{HERE}/x.csv", "--out", f"{HERE}/out", "--quiet"],
        )
        for name in ("empty", "header alone", "short row", "a column missing", "zero bytes", "latin")
    ]
    cases += [
        Case(
            f"gates/{name}",
            {"x.toml": data},
            ["map", source, target, "--gates", f"{HERE}/x.toml", "--out", f"{HERE}/out", "--quiet"],
        )
        for name, data in GATES.items()
    ]
    cases += [
        Case(f"names/{name}", {"x.tsv": data}, ["screen", source, "--names", f"{HERE}/x.tsv", "--quiet"])
        for name, data in NAMES.items()
    ]
    return cases


NEEDED = (
    "map.vtu",
    "certificate.json",
    "steps.json",
    "forward.nii.gz",
    "forward.json",
    "backward_support.nii.gz",
    "source_labels.nii.gz",
    "target_surface.vtp",
    "carried_labels.nii.gz",
    "volume_ratio.nii.gz",
)
CUT = (*NEEDED, "backward.json", "other_order.vtu", "landmarks.csv")


def map_folder_cases(folder):
    files = map_folder_bytes(folder)
    made = {f"no {name}": {k: v for k, v in files.items() if k != name} for name in NEEDED}
    for name in CUT:
        made[f"{name} cut"] = files | {name: cut(files[name], 0.7)}
        made[f"{name} empty"] = files | {name: b""}
    for name in ("certificate.json", "forward.json", "steps.json"):
        made[f"{name} of another kind"] = files | {name: b"[1, 2, 3]"}
        made[f"{name} in latin-1"] = files | {name: b'{"a": "\xe9"}'}
        made[f"{name} deep"] = files | {name: b"[" * 100_000}
    return [
        Case(
            f"map folder/{name}",
            {f"map/{file}": data for file, data in held.items()},
            ["certify", f"{HERE}/map", "--quiet"],
        )
        for name, held in made.items()
    ]


def changed_document(data, keys, value):
    """The document with one of its values replaced."""
    document = json.loads(data)
    inner = document
    for key in keys[:-1]:
        inner = inner[key]
    inner[keys[-1]] = value
    return json.dumps(document).encode()


def field_cases(folder):
    """A field of a map folder taken alone, with the document beside it."""
    files = map_folder_bytes(folder)
    field, told = files["forward.nii.gz"], files["forward.json"]
    unreadable = {
        "no document": (field, None),
        "document cut": (field, cut(told, 0.6)),
        "document empty": (field, b""),
        "document of another kind": (field, b"[]"),
        "document deep": (field, b'{"a":' * 50_000),
        "another schema": (field, changed_document(told, ["schema"], "volmap-steps/1")),
        "no direction": (field, changed_document(told, ["direction"], "sideways")),
        "no scan": (field, changed_document(told, ["grid_space"], None)),
        "a scan without digest": (field, changed_document(told, ["points_into", "sha256"], 7)),
        "a role that does not fit": (field, changed_document(told, ["grid_space", "role"], "TARGET")),
        "a grid of words": (
            field,
            changed_document(told, ["grid_space", "grid"], {"shape": "a", "affine": "b"}),
        ),
        "field cut": (cut(field, 0.7), told),
        "field empty": (b"", told),
        "labels for a field": (files["source_labels.nii.gz"], told),
        "no NIfTI": (b"x" * 600, told),
    }
    refused = {
        "the other field": (files["backward.nii.gz"], told),
        "no check point": (field, changed_document(told, ["check_point"], None)),
        "a check point of words": (field, changed_document(told, ["check_point", "u_mm"], ["a", "b", "c"])),
        "a check point of two": (field, changed_document(told, ["check_point", "x_mm"], [1.0, 2.0])),
        "a check point outside": (field, changed_document(told, ["check_point", "voxel"], [900, 1, 1])),
        "a check point elsewhere": (field, changed_document(told, ["check_point", "voxel"], [1, 1, 1])),
        "a check point without a voxel": (field, changed_document(told, ["check_point", "voxel"], "here")),
        "a check point of another sign": (
            field,
            changed_document(told, ["check_point", "u_mm"], [-1.3, 0, 1.0]),
        ),
        "another grid": (field, changed_document(told, ["grid_space", "grid", "shape"], [4, 4, 4])),
    }
    cases = []
    for made, statuses in ((unreadable, (3,)), (refused, (1,))):
        for name, (data, document) in made.items():
            held = {"x.nii.gz": data, "p.csv": b"name,x_mm,y_mm,z_mm\na,-2,-0.5,0\n"}
            held |= {} if document is None else {"x.json": document}
            command = [
                "carry",
                f"{HERE}/p.csv",
                "--through",
                f"{HERE}/x.nii.gz",
                "--out",
                f"{HERE}/o.csv",
                "--quiet",
            ]
            cases.append(Case(f"field/{name}", held, command, statuses=statuses))
    return cases
