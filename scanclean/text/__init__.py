"""From components to text: lines, dirt, glyphs, words and the order of reading."""
