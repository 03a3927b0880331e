"""A quick password hash for the demonstration alone: its password is printed at every start and protects nothing."""

from django.contrib.auth.hashers import PBKDF2PasswordHasher


class DemonstrationHasher(PBKDF2PasswordHasher):
    algorithm = "pbkdf2_sha256_demonstration"
    iterations = 1000
