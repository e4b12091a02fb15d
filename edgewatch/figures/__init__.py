"""Figures: detections over time -> contact begin and end, window and bar figures."""
