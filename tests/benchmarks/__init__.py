"""How long things take; the program is imported before numpy, as when it runs."""

import workbench as workbench
