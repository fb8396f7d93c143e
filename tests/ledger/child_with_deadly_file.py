"""Run `meterfix ...` with a reader that cannot stand one file: it raises, or the process ends.

What stands at the top applies in the processes that this one starts too, as they load this file
again.
"""

import faulthandler
import os
import sys

from meterfix.run import gather

real = gather.parse_many
HOW = os.environ.get("METERFIX_TEST_DEADLY", "")


def deadly(contents, *args, **more):
    for content in contents:
        if b"DEADLY" in content:
            if HOW == "abort":
                os.abort()
            raise RecursionError("the reader cannot stand this")
    return real(contents, *args, **more)


gather.parse_many = deadly

if __name__ == "__main__":
    HOW = os.environ["METERFIX_TEST_DEADLY"] = sys.argv.pop(1)
    faulthandler.disable()
    from meterfix.faces.commands import main

    main()
