"""A sound speed cast: the water's column as a profiler measured it."""

from __future__ import annotations

from dataclasses import dataclass, field

from qa.model.log import FileAccount, Floats


@dataclass(frozen=True, slots=True, eq=False)
class Cast:
    """One cast, from the top down.

    Parameters
    ----------
    path : str
        The file, as the user wrote it.
    depth : ndarray of float64, shape (n,)
        Strictly increasing, two depths at least. [m]
    sound_speed : ndarray of float64, shape (n,), or None
        None where the file holds temperature and salinity instead. [m/s]
    temperature, salinity : ndarray of float64, shape (n,), or None
        Each as far as the file holds it; NaN at a depth where it is missing. [degC], practical scale
    time : int or None
        When the cast was taken: the first time of the rows used, in nanoseconds since 1970-01-01 UTC.
    latitude, longitude : float or None
        Where: the first position of the rows used. [deg]
    account : FileAccount
        What became of the file's rows; rows of the way not used are out of scope.
    notes : tuple of str
        What was done with the rows that the user should know.
    """

    path: str
    depth: Floats
    sound_speed: Floats | None = None
    temperature: Floats | None = None
    salinity: Floats | None = None
    time: int | None = None
    latitude: float | None = None
    longitude: float | None = None
    account: FileAccount = field(default_factory=lambda: FileAccount(""))
    notes: tuple[str, ...] = ()

    def __len__(self) -> int:
        return len(self.depth)
