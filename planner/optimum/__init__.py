"""The Bellman recursion and its grids: Problem -> Policy."""
