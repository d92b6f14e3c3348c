"""Asking an atlas: stored measures in, answers out; nothing here can compute a loop again."""
