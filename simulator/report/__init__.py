"""Dataset in, page and terminal text out: pure rendering, no results of its own."""
