"""DICOM in and out: the only place where coordinates are LPS.

What is written is new through and through: no field of an input is copied (`object_head`), identifiers are
made from digests (`uids`), and the grid is laid so that the standard can hold it (`laying`).
"""
