"""How the radius of one strongly connected class is found, by structure, and how bounds on it are made certain."""
