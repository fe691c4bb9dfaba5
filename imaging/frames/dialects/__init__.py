"""One file a frame format, each with one registration line."""
