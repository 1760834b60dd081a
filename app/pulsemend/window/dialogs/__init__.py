"""Small windows that ask or tell one thing. None of them blocks: signals say what came of it."""
