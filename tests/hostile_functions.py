"""What a Python function that is to be judged may do wrong: the text of its file by the fault."""

from __future__ import annotations

FUNCTIONS: dict[str, str] = {
    "raises": "def f(times, positions):\n    return 1 / 0\n",
    "exits": "import sys\ndef f(times, positions):\n    sys.exit(0)\n",
    "exits when loaded": "raise SystemExit(0)\n",
    "is no Python": "def f(:\n",
    "is missing": "def g(times, positions):\n    return {}\n",
    "is no function": "f = 3\n",
    "takes other arguments": "def f(times):\n    return {}\n",
    "returns nothing": "def f(times, positions):\n    pass\n",
    "returns a list": "def f(times, positions):\n    return [1]\n",
    "returns no observable": "def f(times, positions):\n    return {}\n",
    "returns unknown names": "def f(times, positions):\n    return {'energy': times}\n",
    "has keys of other kinds": "def f(times, positions):\n    return {1: times}\n",
    "returns columns": "def f(times, positions):\n    return {'energy_density': times}\n",
    "returns the transpose": "import numpy as np\ndef f(times, positions):\n"
    "    return {'energy_density': np.zeros((positions['bond'].size, times.size))}\n",
    "returns sites for bonds": "import numpy as np\ndef f(times, positions):\n"
    "    return {'energy_density': np.zeros((times.size, positions['site'].size))}\n",
    "returns text": "def f(times, positions):\n    return {'energy_density': 'abc'}\n",
    "returns ragged lists": "def f(times, positions):\n    return {'energy_density': [[1], [1, 2]]}\n",
    "returns complex numbers": "import numpy as np\ndef f(times, positions):\n"
    "    return {'energy_density': 1j * np.ones((times.size, positions['bond'].size))}\n",
    "returns nan": "import numpy as np\ndef f(times, positions):\n"
    "    return {'energy_density': np.full((times.size, positions['bond'].size), np.nan)}\n",
    "returns infinity": "import numpy as np\ndef f(times, positions):\n"
    "    return {'energy_density': np.full((times.size, positions['bond'].size), -np.inf)}\n",
    "returns what raises": "class X:\n    def __array__(self, *_, **__):\n        raise ValueError('no')\n"
    "def f(times, positions):\n    return {'energy_density': X()}\n",
    "recurses": "def f(times, positions):\n    return f(times, positions)\n",
    "imports what is not there": "import no_such_module_anywhere\n",
    "says odd things": "def f(times, positions):\n    raise ValueError('a\\n\\x1b[31m\\0b' * 200)\n",
    "is not text": "\0\0\0",
}
