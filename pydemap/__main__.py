from pydemap.cli import main

main()
