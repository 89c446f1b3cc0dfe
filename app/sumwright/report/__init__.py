"""Documents made from a design and its results: report, bring-up sheet, calibration record, exports."""
