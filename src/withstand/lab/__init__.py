"""The conductor: what is exact is answered exactly, the engine simulates the rest, judgement says what is still open."""
