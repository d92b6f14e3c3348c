"""Showing answers: tables for a terminal, figures for a page, progress while one waits."""
