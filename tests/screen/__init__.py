"""The sheet as the user meets it: driven by keys, painted as text, inside textual, and in a real pseudo-terminal."""
