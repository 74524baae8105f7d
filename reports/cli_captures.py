"""Commands on one capture: ``measure`` and ``watch``; parse, one call, write, exit code."""

from __future__ import annotations

from reports.cli_options import (
    BandOption,
    CaptureArgument,
    ChannelsOption,
    ClockErrorOption,
    ClockErrorUOption,
    DatasetOption,
    DecimalOption,
    DelimiterOption,
    DrivenFileOption,
    DrivenOption,
    EpsOption,
    FormatOption,
    ForOption,
    FreeDrivenOption,
    FreeReferenceOption,
    HoldOption,
    IdleOption,
    JsonOption,
    MethodOption,
    NulOption,
    PsiPictureOption,
    QuietOption,
    RateFromOption,
    RateOption,
    ReferenceOption,
    SampleTypeOption,
    SettleOption,
    SharedOption,
    SideOption,
    SourceArgument,
    SpreadOption,
    StartShiftOption,
    StatedOrderOption,
    SweepFileOption,
    TimeColumnOption,
    TruncatedOption,
    TrustOption,
    WindowOption,
)
from reports.cli_words import emit, given_words, read_words, say, write_json
from reports.options import clock_words, order_word, parse_bands, positive


def measure(
    file: CaptureArgument,
    json: JsonOption = None,
    sweep: SweepFileOption = None,
    reference: ReferenceOption = None,
    driven: DrivenOption = None,
    order: StatedOrderOption = None,
    method: MethodOption = None,
    band: BandOption = None,
    rate: RateOption = None,
    eps: EpsOption = None,
    hold: HoldOption = None,
    free_spread: SpreadOption = None,
    settle: SettleOption = None,
    free_driven: FreeDrivenOption = None,
    free_reference: FreeReferenceOption = None,
    driven_file: DrivenFileOption = None,
    clock_error_ppm: ClockErrorOption = None,
    clock_error_u_ppm: ClockErrorUOption = None,
    shared: SharedOption = None,
    start_shift: StartShiftOption = None,
    picture: PsiPictureOption = None,
    dataset: DatasetOption = None,
    format: FormatOption = None,
    trust_file_length: TrustOption = False,
    allow_truncated: TruncatedOption = False,
    delimiter: DelimiterOption = None,
    decimal: DecimalOption = None,
    time_column: TimeColumnOption = None,
    stop_at_nul: NulOption = False,
    rate_from: RateFromOption = None,
    transformer_side: SideOption = None,
    quiet: QuietOption = False,
) -> int:
    """Measure one capture: phases, order, episodes, slips, detuning and coupling."""
    from reports.looking import measure_file

    words = given_words(
        sweep=sweep,
        reference=reference,
        driven=driven,
        method=method,
        bands=parse_bands(band) if band else None,
        eps=eps,
        hold=hold,
        free_spread=free_spread,
        settle_s=settle,
        free_driven=free_driven,
        free_reference=free_reference,
        **order_word(order),
        **clock_words(driven_file, clock_error_ppm, clock_error_u_ppm, shared, start_shift),
    )
    read = read_words(
        rate_hz=rate,
        dataset=dataset,
        format=format,
        trust_file_length=trust_file_length,
        allow_truncated=allow_truncated,
        delimiter=delimiter,
        decimal=decimal,
        time_column=time_column,
        stop_at_nul=stop_at_nul,
        rate_attribute=rate_from,
        transformer_side=transformer_side,
    )
    text, value, code = measure_file(file, words=words, read=read, picture=picture, quiet=quiet)
    if json:
        write_json(value, json)
    if json != "-":
        emit(text)
    return code


def watch(
    source: SourceArgument,
    json: JsonOption = None,
    sweep: SweepFileOption = None,
    reference: ReferenceOption = None,
    driven: DrivenOption = None,
    order: StatedOrderOption = None,
    method: MethodOption = None,
    band: BandOption = None,
    eps: EpsOption = None,
    hold: HoldOption = None,
    rate: RateOption = None,
    channels: ChannelsOption = None,
    sample_type: SampleTypeOption = None,
    window: WindowOption = None,
    for_: ForOption = None,
    idle: IdleOption = None,
    quiet: QuietOption = False,
) -> int:
    """Follow a growing capture or a pipe and say when lock is gained, lost, slipped."""
    from reports.watch import watch_source

    words = given_words(
        sweep=sweep,
        reference=reference,
        driven=driven,
        method=method,
        bands=parse_bands(band) if band else None,
        eps=eps,
        hold=hold,
        rate_hz=positive("--rate", rate),
        channels=channels,
        sample_type=sample_type,
        window_s=positive("--window", window),
        for_s=positive("--for", for_),
        idle_s=positive("--idle", idle),
        **order_word(order),
    )
    return watch_source(source, words, json, emit, (lambda _: None) if quiet else say)
