"""What keeps people alive: two pure tables of states, their laws, and the warden that obeys."""
