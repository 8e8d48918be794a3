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
from pathlib import Path

# Library, and the package that has it with apt, dnf, pacman and zypper.
LIBRARIES = {
    "libGL.so.1": ("libgl1", "mesa-libGL", "libglvnd", "Mesa-libGL1"),
    "libEGL.so.1": ("libegl1", "mesa-libEGL", "libglvnd", "Mesa-libEGL1"),
    "libxkbcommon.so.0": ("libxkbcommon0", "libxkbcommon", "libxkbcommon", "libxkbcommon0"),
    "libfontconfig.so.1": ("libfontconfig1", "fontconfig", "fontconfig", "fontconfig"),
    "libdbus-1.so.3": ("libdbus-1-3", "dbus-libs", "dbus", "libdbus-1-3"),
    "libglib-2.0.so.0": ("libglib2.0-0", "glib2", "glib2", "libglib-2_0-0"),
    "libxcb-cursor.so.0": ("libxcb-cursor0", "xcb-util-cursor", "xcb-util-cursor", "libxcb-cursor0"),
    "libxkbcommon-x11.so.0": ("libxkbcommon-x11-0", "libxkbcommon-x11", "libxkbcommon-x11", "libxkbcommon-x11-0"),
    "libxcb-icccm.so.4": ("libxcb-icccm4", "xcb-util-wm", "xcb-util-wm", "libxcb-icccm4"),
    "libxcb-keysyms.so.1": ("libxcb-keysyms1", "xcb-util-keysyms", "xcb-util-keysyms", "libxcb-keysyms1"),
    "libxcb-shape.so.0": ("libxcb-shape0", "libxcb", "libxcb", "libxcb-shape0"),
}
MANAGERS = {
    "apt-get": ["apt-get", "install", "-y", "-qq", "--no-install-recommends"],
    "dnf": ["dnf", "install", "-y", "-q"],
    "pacman": ["pacman", "-S", "--noconfirm", "--needed"],
    "zypper": ["zypper", "--non-interactive", "install"],
}


def loads(library: str) -> bool:
    try:
        ctypes.CDLL(library)
    except OSError:
        return False
    return True


def manager() -> str | None:
    return next((name for name in MANAGERS if shutil.which(name)), None)


def allowed() -> list[str] | None:
    """What to put before an install command; None where this user may not install."""
    if os.geteuid() == 0:
        return []
    if shutil.which("sudo") and subprocess.run(["sudo", "-n", "true"], capture_output=True).returncode == 0:
        return ["sudo", "-n"]
    return None


def install(packages: list[str]) -> bool:
    """Installs system packages where it may; says whether it did."""
    name, prefix = manager(), allowed()
    if name is None or prefix is None:
        return False
    environment = {**os.environ, "DEBIAN_FRONTEND": "noninteractive"}
    if name == "apt-get":
        subprocess.run([*prefix, "apt-get", "update", "-qq"], env=environment, stdout=subprocess.DEVNULL)
    command = [*prefix, *MANAGERS[name], *packages]
    return subprocess.run(command, env=environment, stdout=subprocess.DEVNULL).returncode == 0


def make_libraries() -> int:
    if not sys.platform.startswith("linux"):
        return 0
    missing = [library for library in LIBRARIES if not loads(library)]
    if not missing:
        return 0
    name = manager()
    column = list(MANAGERS).index(name) if name in MANAGERS else 0
    packages = sorted({LIBRARIES[library][column] for library in missing})
    print("Qt needs system libraries that are missing:", ", ".join(missing))
    if name is not None and install(packages) and all(loads(library) for library in missing):
        print("Installed:", " ".join(packages))
        return 0
    command = " ".join([*(MANAGERS[name] if name else ["apt-get", "install"]), *packages])
    print(f"They could not be installed from here. Ask for them with:\n    {command}", file=sys.stderr)
    return 1


def make_screen() -> int:
    """A virtual screen lets one test run the window as on X11. Without it that test says so and is left out."""
    if sys.platform.startswith("linux") and not shutil.which("Xvfb"):
        install(["xvfb"] if manager() == "apt-get" else ["xorg-x11-server-Xvfb"])
    return 0


def make_environment(folder: str) -> int:
    if (Path(folder) / "bin" / "python").exists():
        return 0
    try:
        import ensurepip  # noqa: F401
        import venv
    except ImportError:
        package = f"python3.{sys.version_info.minor}-venv"
        if not install([package]):
            print(f"This Python cannot make virtual environments: install {package}.", file=sys.stderr)
            return 1
        return subprocess.run([sys.executable, "-m", "venv", folder]).returncode
    venv.create(folder, with_pip=True)
    return 0


def main(arguments: list[str]) -> int:
    if arguments[:1] == ["venv"] and len(arguments) == 2:
        return make_environment(arguments[1])
    if arguments == ["libraries"]:
        return make_libraries()
    if arguments == ["screen"]:
        return make_screen()
    print(__doc__, file=sys.stderr)
    return 2


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
