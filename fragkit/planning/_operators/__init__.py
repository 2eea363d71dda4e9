"""Operators as vectors of rows: fragments to rows and back, and what vanishes at fixed electron numbers."""
