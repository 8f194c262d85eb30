"""Names of the atoms that a sequence may say. The physics room holds their constants; a test compares the two lists."""

ATOMS = ("Rb-85", "Rb-87", "Cs-133", "Sr-87", "Sr-88", "Yb-171", "Yb-174", "K-39", "K-40", "K-41")
