"""Laws: formulas in subscript notation, read into equations and derived by SymPy."""
