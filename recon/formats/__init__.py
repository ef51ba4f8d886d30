"""File formats: one module each. `open_scan` is the only door for scans, whatever their format."""

from recon.formats.image_layout import ImageFile, ImageWriter, read_image
from recon.formats.scan_layout import read_scan as open_scan
from recon.formats.scan_layout import write_scan

__all__ = ["ImageFile", "ImageWriter", "open_scan", "read_image", "write_scan"]
