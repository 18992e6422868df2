"""Methods that choose their steps."""
