"""Results for people (tables and text charts) and for machines (JSON); nothing in here computes."""
