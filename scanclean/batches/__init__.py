"""Many pages: which, done by whom, recorded and resumed."""
