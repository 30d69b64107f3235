"""One file per value method: what is this impression worth, and how surely?"""
