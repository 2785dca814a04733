"""Cuts: rows that every whole-unit plan meets and the relaxation's point does not."""
