"""DICOM in and out: the only place where coordinates are LPS.

In: `opening.py` opens a file and `fields.py` takes values out of it, one sentence for whatever is wrong with
either; `geometry.py` makes a grid of planes; `pixels.py` gives stored numbers frame by frame, `rescaling.py`
what they stand for; `segments.py` says what segments are.  `segmentation_reading.py` and `series.py` make
volumes of it, and `volumes.py` decides between them.

Out: what is written is new through and through: no field of an input is copied (`object_head`), identifiers
are made from digests (`uids`), and the grid is laid so that the standard can hold it (`laying`).
"""
