"""How measured traces become quantities with uncertainties; knows no file and no database."""
