"""The sequence that a person wrote: its model, its problems, and the brief made of it; pure."""
