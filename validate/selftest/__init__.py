"""The instrument measures itself: compiled code against its source, the reference, the files."""
