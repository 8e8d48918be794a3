"""Makes ready what the installer of Python packages cannot: the virtual environment and Qt's system libraries.

Runs with nothing but the standard library, before anything is installed:

    setup_check.py venv FOLDER     makes a virtual environment
    setup_check.py libraries       finds Qt's libraries, installs missing ones where it may, else names them
    setup_check.py screen          the same for the virtual screen that some tests use
"""

from __future__ import annotations

import ctypes
import os
import shutil
import subprocess
import sys
from collections.abc import Iterable
from pathlib import Path

# Library, and the package that has it, in the order of MANAGERS. Without these Qt cannot even be imported.
LIBRARIES = {
    "libGL.so.1": ("libgl1", "libglvnd-glx", "libglvnd", "libglvnd"),
    "libEGL.so.1": ("libegl1", "libglvnd-egl", "libglvnd", "libglvnd"),
    "libxkbcommon.so.0": ("libxkbcommon0", "libxkbcommon", "libxkbcommon", "libxkbcommon0"),
    "libfontconfig.so.1": ("libfontconfig1", "fontconfig", "fontconfig", "fontconfig"),
    "libdbus-1.so.3": ("libdbus-1-3", "dbus-libs", "dbus", "libdbus-1-3"),
    "libglib-2.0.so.0": ("libglib2.0-0", "glib2", "glib2", "libglib-2_0-0"),
}
# Without these it cannot open a window on X11; drawing to files does without them.
WINDOW_LIBRARIES = {
    "libxcb-cursor.so.0": ("libxcb-cursor0", "xcb-util-cursor", "xcb-util-cursor", "libxcb-cursor0"),
    "libxkbcommon-x11.so.0": ("libxkbcommon-x11-0", "libxkbcommon-x11", "libxkbcommon-x11", "libxkbcommon-x11-0"),
    "libxcb-icccm.so.4": ("libxcb-icccm4", "xcb-util-wm", "xcb-util-wm", "libxcb-icccm4"),
    "libxcb-keysyms.so.1": ("libxcb-keysyms1", "xcb-util-keysyms", "xcb-util-keysyms", "libxcb-keysyms1"),
    "libxcb-shape.so.0": ("libxcb-shape0", "libxcb", "libxcb", "libxcb-shape0"),
}
MANAGERS = {
    "apt-get": ["apt-get", "install", "-y", "-qq", "--no-install-recommends"],
    "dnf": ["dnf", "install", "-y", "-q"],
    "pacman": ["pacman", "-Sy", "--noconfirm", "--needed"],
    "zypper": ["zypper", "--non-interactive", "install"],
}
SCREEN = ("xvfb", "xorg-x11-server-Xvfb", "xorg-server-xvfb", "xorg-x11-server-Xvfb")


def loads(library: str) -> bool:
    """Whether the dynamic linker finds the library. Asking the linker itself sees what Qt will see."""
    try:
        ctypes.CDLL(library)
    except OSError:
        return False
    return True


def manager() -> str | None:
    """The system's package manager, of those that are known here."""
    return next((name for name in MANAGERS if shutil.which(name)), None)


def packages_of(names: Iterable[tuple[str, ...]]) -> list[str]:
    """What the packages are called by this system's manager; Debian's names where the manager is not known."""
    name = manager()
    column = list(MANAGERS).index(name) if name else 0
    return sorted({each[column] for each in names})


def command_for(packages: list[str]) -> str:
    """What a person would type to install them."""
    command = [part for part in MANAGERS[manager() or "apt-get"] if part not in ("-qq", "-q", "-y", "--noconfirm")]
    return " ".join(["sudo", *command, *packages])


def allowed() -> list[str] | None:
    """What to put before an install command; None where this user may not install."""
    if os.geteuid() == 0:
        return []
    if shutil.which("sudo") and subprocess.run(["sudo", "-n", "true"], capture_output=True).returncode == 0:
        return ["sudo", "-n"]
    return None


def install(packages: list[str]) -> bool:
    """Installs system packages where it may; says whether it did. What goes wrong is told by the manager itself."""
    name, prefix = manager(), allowed()
    if name is None or prefix is None:
        return False
    print("Installing system packages:", " ".join(packages), flush=True)
    prefix = [*prefix, "env", "DEBIAN_FRONTEND=noninteractive"]  # sudo would not pass it on
    if name == "apt-get":
        subprocess.run([*prefix, "apt-get", "update", "-qq"], stdin=subprocess.DEVNULL, stdout=subprocess.DEVNULL)
    command = [*prefix, *MANAGERS[name], *packages]
    return subprocess.run(command, stdin=subprocess.DEVNULL, stdout=subprocess.DEVNULL).returncode == 0


def make_libraries() -> int:
    """Qt's libraries: 0 where all that is needed is there, 1 where the user has to ask for some."""
    if not sys.platform.startswith("linux"):
        return 0
    known = LIBRARIES | WINDOW_LIBRARIES
    missing = [library for library in known if not loads(library)]
    if not missing:
        return 0
    packages = packages_of(known[library] for library in missing)
    install(packages)
    missing = [library for library in known if not loads(library)]
    if not missing:
        return 0
    command = command_for(packages_of(known[library] for library in missing))
    print(f"Qt misses system libraries: {', '.join(missing)}.", file=sys.stderr)
    print(f"They could not be installed from here. Install them with:\n    {command}", file=sys.stderr)
    needed = [library for library in missing if library in LIBRARIES or os.environ.get("DISPLAY")]
    if not needed:
        print("Until then no window can be opened on X11; drawing to files works.", file=sys.stderr)
    return 1 if needed else 0


def make_screen() -> int:
    """A virtual screen lets tests run the window as on X11. Without it they say so and are left out: never an error."""
    if sys.platform.startswith("linux") and not shutil.which("Xvfb"):
        packages = packages_of([SCREEN])
        install(packages)
        if not shutil.which("Xvfb"):
            print(f"Without Xvfb the tests on an X11 screen are left out. To run them: {command_for(packages)}")
    return 0


def make_environment(folder: Path) -> int:
    """A virtual environment with pip. One that is whole stays as it is; a broken or half-made one is made anew."""
    if sys.version_info < (3, 11):  # noqa: UP036  (this file runs before the version is settled)
        print(f"Planimeter needs Python 3.11 or newer, this is {sys.version.split()[0]}.", file=sys.stderr)
        return 1
    if is_whole(folder):
        return 0
    try:
        import ensurepip  # noqa: F401  (some systems leave it out of Python and pack it apart)
    except ImportError:
        package = f"python3.{sys.version_info.minor}-venv" if manager() == "apt-get" else "python3-pip"
        if not install([package]):
            print(f"This Python cannot make virtual environments: {command_for([package])}", file=sys.stderr)
            return 1
    made = subprocess.run([sys.executable, "-m", "venv", "--clear", str(folder)])
    return made.returncode


def is_whole(folder: Path) -> bool:
    """Whether there is an environment whose Python is fit and has pip."""
    python = folder / "bin" / "python"
    if not python.exists():
        return False
    check = "import sys, pip; sys.exit(sys.version_info < (3, 11))"
    return subprocess.run([python, "-c", check], capture_output=True).returncode == 0


def main(arguments: list[str]) -> int:
    """Carries out one request; the exit code tells whether what it is for can go on."""
    if arguments[:1] == ["venv"] and len(arguments) == 2:
        return make_environment(Path(arguments[1]))
    if arguments == ["libraries"]:
        return make_libraries()
    if arguments == ["screen"]:
        return make_screen()
    print(__doc__, file=sys.stderr)
    return 2


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
