"""A scene with one stroke, from the few numbers of the command line."""

from __future__ import annotations

from whistler.errors import Notice, UsageError
from whistler.synthesis.parts import Mains, Sferics
from whistler.synthesis.scene import Scene
from whistler.synthesis.strokes import Path, Stroke

#: The stroke falls after this share of the recording.
STROKE_SHARE = 0.1


def quick_scene(
    l_value: float,
    *,
    equatorial_density_cm3: float,
    hops: tuple[int, ...] = (1,),
    snr_db: float = 12.0,
    duration_s: float = 30.0,
    sferic_rate_hz: float = 20.0,
    sample_rate_hz: int = 48_000,
    seed: int = 1,
) -> Scene:
    """Return a scene with one stroke that lights one path, in an ordinary background.

    Parameters
    ----------
    l_value : float
        L of the path.
    equatorial_density_cm3 : float
        Density at its equator, cm^-3.
    hops : tuple of int
        Field-line crossings heard.
    snr_db : float
        Cell SNR of the first of them, dB.
    duration_s : float
        Length of the recording, s.
    sferic_rate_hz : float
        Background sferics a second.
    sample_rate_hz : int
        Sampling rate.
    seed : int
        Seed of everything random.

    Returns
    -------
    Scene
        Named after its numbers.

    Raises
    ------
    UsageError
        When a number is outside its range.

    Examples
    --------
    >>> quick_scene(3.0, equatorial_density_cm3=900.0).name
    'synthetic_l3_density900_hops1_snr12_seed1'
    """
    path = Path(l_value, equatorial_density_cm3, snr_db=snr_db, hops=hops)
    order = "-".join(str(hop) for hop in hops)
    return Scene(
        duration_s=duration_s,
        sample_rate_hz=sample_rate_hz,
        seed=seed,
        name=f"synthetic_l{l_value:g}_density{equatorial_density_cm3:g}_hops{order}"
        f"_snr{snr_db:g}_seed{seed}",
        shows="one stroke, one path",
        strokes=(Stroke(STROKE_SHARE * duration_s, (path,)),),
        sferics=(Sferics(rate_hz=sferic_rate_hz),),
        mains=Mains(),
    )


def parse_hops(text: str) -> tuple[int, ...]:
    """Return the crossings that text like ``1,3,5`` lists.

    Parameters
    ----------
    text : str
        Whole numbers with commas between.

    Returns
    -------
    tuple of int
        In the order given.

    Raises
    ------
    UsageError
        When it is something else.

    Examples
    --------
    >>> parse_hops("1,3,5")
    (1, 3, 5)
    """
    try:
        return tuple(int(part) for part in text.split(","))
    except ValueError as error:
        reason = f"{text!r} is not a list of whole numbers"
        raise UsageError(Notice("E615", "--hops", reason, "write for example 1,3,5")) from error
