"""Rows in, derived and judged rows out: pure, so that any run can be judged again."""
