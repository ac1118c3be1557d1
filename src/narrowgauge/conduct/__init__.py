"""Run, judge, and run again until a stopping rule is content."""
