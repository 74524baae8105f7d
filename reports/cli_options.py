"""Options of the command line, each worded once; commands put them into their signatures."""

from __future__ import annotations

from typing import Annotated

import typer

JsonOption = Annotated[
    str | None, typer.Option("--json", help="Write the result as JSON to FILE ('-': stdout).")
]
CaptureArgument = Annotated[str, typer.Argument(help="Capture with both oscillators.")]
SourceArgument = Annotated[
    str,
    typer.Argument(metavar="SOURCE", help="Growing capture, or '-' for raw samples on a pipe."),
]
# None stands for "not said": the sweep file given by --sweep then decides, else the default.
ReferenceOption = Annotated[
    str | None,
    typer.Option("--reference", help="Reference channel: number from 1, or name (else 1)."),
]
DrivenOption = Annotated[
    str | None, typer.Option("--driven", help="Driven channel: number from 1, or name (else 2).")
]
OrderOption = Annotated[str, typer.Option("--order", help="Locking order n:m.")]
StatedOrderOption = Annotated[
    str | None, typer.Option("--order", help="Locking order n:m, or 'find' (else 1:1).")
]
MethodOption = Annotated[
    str | None,
    typer.Option("--method", help="Phase estimator: auto, analytic, marker, pulse or spike."),
]
SweepFileOption = Annotated[
    str | None,
    typer.Option("--sweep", help="Sweep file for wiring and rules; options given here win."),
]
SettleOption = Annotated[
    float | None, typer.Option("--settle", help="Seconds dropped at the start.")
]
FreeDrivenOption = Annotated[
    list[str] | None, typer.Option("--free-driven", help="Capture of the driven one alone.")
]
FreeReferenceOption = Annotated[
    list[str] | None, typer.Option("--free-reference", help="Capture of the reference alone.")
]
PsiPictureOption = Annotated[
    str | None, typer.Option("--picture", help="Write psi against time to FILE.")
]
DrivenFileOption = Annotated[
    str | None,
    typer.Option("--driven-file", help="The driven one's capture, by another recorder."),
]
ClockErrorOption = Annotated[
    float | None,
    typer.Option("--clock-error-ppm", help="How fast the driven one's recorder runs, ppm."),
]
ClockErrorUOption = Annotated[
    float | None,
    typer.Option("--clock-error-u-ppm", help="Standard uncertainty of the clock error, ppm."),
]
SharedOption = Annotated[
    str | None,
    typer.Option("--shared", help="Channel that both recorders took: ties their clocks."),
]
StartShiftOption = Annotated[
    float | None,
    typer.Option("--start-shift", help="Seconds the driven one's recorder started later."),
]
ChannelsOption = Annotated[
    int | None, typer.Option("--channels", min=1, help="Raw samples: channels a frame.")
]
SampleTypeOption = Annotated[
    str | None,
    typer.Option("--sample-type", help="Raw samples: float32, int16 or int32, little-endian."),
]
WindowOption = Annotated[
    float | None, typer.Option("--window", help="Seconds looked at together (else 20).")
]
ForOption = Annotated[float | None, typer.Option("--for", help="End after so many seconds.")]
IdleOption = Annotated[
    float | None, typer.Option("--idle", help="End after so many seconds without growth.")
]
BandOption = Annotated[
    list[str] | None,
    typer.Option("--band", help="Band LO:HI in Hz; give it twice for reference, driven."),
]
RateOption = Annotated[
    float | None, typer.Option("--rate", help="Sampling rate in Hz, over what the file says.")
]
EpsOption = Annotated[
    float | None, typer.Option("--eps", help="Half-width of the locked band in turns, below 0.5.")
]
HoldOption = Annotated[
    str | None,
    typer.Option("--hold", help="Minimum time locked: seconds, or beats as in '2beats'."),
]
SpreadOption = Annotated[
    float | None,
    typer.Option("--free-spread", help="Relative spread of free frequencies (no baseline)."),
]
QuietOption = Annotated[bool, typer.Option("--quiet", help="No progress, no notes.")]
WorkersOption = Annotated[
    int | None, typer.Option("--workers", min=1, help="Processes; one per core by default.")
]
ClusterOption = Annotated[
    str | None, typer.Option("--cluster", help="Address of a dask scheduler to run on.")
]
DateOption = Annotated[
    str | None, typer.Option("--date", help="Date to print, YYYY-MM-DD (else that of the run).")
]
ProgressOption = Annotated[
    str, typer.Option("--progress", help="Progress display: auto, bar, plain or none.")
]
DatasetOption = Annotated[
    str | None, typer.Option("--dataset", help="Data set or variable inside the file.")
]
FormatOption = Annotated[
    str | None, typer.Option("--format", help="Read the file as this format, whatever it looks.")
]
TrustOption = Annotated[
    bool, typer.Option("--trust-file-length", help="Believe the file's length, not its header.")
]
TruncatedOption = Annotated[
    bool, typer.Option("--allow-truncated", help="Read what is there of a cut file, with a note.")
]
DelimiterOption = Annotated[
    str | None, typer.Option("--delimiter", help="Text files: mark between columns ('tab' too).")
]
DecimalOption = Annotated[
    str | None, typer.Option("--decimal", help="Text files: decimal mark, '.' or ','.")
]
TimeColumnOption = Annotated[
    str | None,
    typer.Option("--time-column", help="Text files: column of times (number, name, 'none')."),
]
NulOption = Annotated[
    bool, typer.Option("--stop-at-nul", help="Text files: end where the NUL bytes begin.")
]
RateFromOption = Annotated[
    str | None,
    typer.Option("--rate-from", help="Attribute or variable that holds the sampling rate."),
]
SideOption = Annotated[
    str | None,
    typer.Option("--transformer-side", help="COMTRADE: scale to 'primary' or 'secondary'."),
]
SeedOption = Annotated[int, typer.Option("--seed", help="Seed of every random draw.")]
