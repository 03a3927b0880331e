"""The pages of master data. Views translate HTTP; selectors read, services write."""
