"""Write catalogues and cutouts."""
