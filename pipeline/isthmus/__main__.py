from isthmus.cli import main

main()
