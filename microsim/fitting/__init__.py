"""Durations -> fitted distributions with their uncertainty, stored fits, and curves without a family."""
