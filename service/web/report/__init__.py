"""The report of one job as PDF: two or three pages for an ordinary calibration."""
