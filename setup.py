from setuptools import find_packages, setup

ROOMS = ("yields", "integrate", "scripts", "tables")

# rooms are found together with the packages inside them, so that a new one can't be forgotten
found = find_packages(".", include=[pattern for room in ROOMS for pattern in (room, f"{room}.*")])
setup(
    packages=[f"steelyard.{package}" for package in found],
    package_dir={f"steelyard.{package}": package.replace(".", "/") for package in found},
)
