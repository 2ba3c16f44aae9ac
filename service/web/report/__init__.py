"""The report of one job as PDF: two pages for an ordinary calibration."""
