"""Arithmetic of cells: exact shares of cells in polygons, prediction, and calibration to the figures of parcels.

Arrays in, arrays out; nothing here opens a file.
"""
