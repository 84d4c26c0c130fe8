"""Scan files: columns of text that somebody recorded, read into a scan and what is known of it.

A header names the columns and their units, comment lines may carry ``key = value``. What the file
leaves open may be said by the caller; what the caller says wins over the file.
"""

from bench.scanfile.read import ScanFile, ScanOptions, read_scan_file

__all__ = ["ScanFile", "ScanOptions", "read_scan_file"]
