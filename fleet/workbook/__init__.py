"""A stranger's workbook taken into a fleet folder: sheets, a confirmed mapping of headings, cells, units named."""
