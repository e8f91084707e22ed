"""What a transformer is: nameplate, preferred ratings, default characteristics. No I/O."""
