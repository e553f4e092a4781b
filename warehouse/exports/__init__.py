"""Exports of one publication or data cut: one module per format, each written whole and with its cautions."""
