"""The parasitic thyristor: gains of its transistors, its loop, and every site evaluated."""
