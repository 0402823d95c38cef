"""Small-signal answers from exact linearisation: modes, responses, loops, impedances, margins and what follows from them."""
