"""A quick command of each verb, on the small pair."""

EDGE = ["--edge", "4.4"]  # mm; about 4000 tets


def of_verb(verb, pair, out):
    """A quick command of each verb."""
    scans = [str(pair.source), str(pair.target)]
    (out / "point.csv").write_text("name,x_mm,y_mm,z_mm\na,1,2,3\n", encoding="utf-8")
    return {
        "screen": ["screen", *scans],
        "mesh": ["mesh", scans[0], "--out", str(out / "mesh ü.vtu"), *EDGE],
        "map": ["map", *scans, "--out", str(out / "karte é"), *EDGE, "--one-order"],
        "certify": ["certify", str(pair.folder)],
        "carry": [
            "carry",
            str(out / "point.csv"),
            "--through",
            str(pair.folder),
            "--out",
            str(out / "there.csv"),
        ],
        "loop": ["loop", str(pair.folder), str(pair.folder), "--out", str(out / "round é.csv")],
        "measure": ["measure", str(pair.folder), "--out", str(out / "t é.csv")],
        "report": ["report", str(pair.folder)],
        "phantom": ["phantom", "--list"],
        "demo": ["demo", "--out", str(out / "demo")],
    }[verb]
