"""Long files: every row is screened in passing, and the rows that decide are judged exactly."""
