"""`python -m bywayd` is `byway`."""

from bywayd.commands import main

main()
