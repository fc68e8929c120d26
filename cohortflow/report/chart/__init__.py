"""One file a chart; style.py holds the look they share, frames.py what they take."""
