"""What a record tells of the apparatus: corrections to the descriptions, with standard errors."""
