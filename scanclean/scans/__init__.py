"""Files of pages: opened, read one page at a time, written whole or not at all."""
