"""From pixels to ink: the paper measured, the threshold, what is shade, edge or pinhole."""
