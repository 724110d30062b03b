#!/usr/bin/env python3
"""Entry for management commands; `make help` lists what a person usually wants."""

import os
import sys

if __name__ == "__main__":
    os.environ.setdefault("DJANGO_SETTINGS_MODULE", "kinetics_db.config.settings.local")
    from django.core.management import execute_from_command_line

    execute_from_command_line(sys.argv)
