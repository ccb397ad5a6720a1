"""Show: pictures and printed summaries of states."""
