"""One response from the records of one device: which method, why, and what it gives."""

from dataclasses import dataclass, replace

import numpy as np

from identkit.errors import InputError, Problem
from identkit.methods.arrays import BoolArray, ComplexArray
from identkit.methods.averaged_spectra import AveragedSpectra, SpectrumAverager
from identkit.methods.direct_bias import DirectBias, direct_bias
from identkit.methods.direct_response import input_noise_response, output_noise_response
from identkit.methods.instrumental_response import EstimatedResponse
from identkit.methods.joint_input_output import joint_response
from identkit.methods.local_polynomial import local_polynomial_response
from identkit.methods.multisine_average import excited_lines, periodic_lines, periodic_response
from identkit.methods.periodicity import excitation_period, settled_period
from identkit.methods.stepped_sine import dwells, sine_phasors
from identkit.methods.subspace_opinion import SubspaceModes, subspace_modes
from identkit.readers.records import RecordFile
from identkit.settings_records import RecordSettings
from identkit.stages.record_sampling import Filter, PlantEstimate, PlantModel, plant_estimate
from identkit.stages.record_signals import Signals, Tally

SEGMENTS_WANTED = 40
FEWEST_AVERAGES = 16
_SETTLING_SHARE = 0.25
_PERIOD_SEARCH = 1 << 20
_CENTRES_WANTED = 1500


@dataclass(frozen=True)
class RecordTask:
    """The records of one device on their way to a worker."""

    files: tuple[RecordFile, ...]
    options: RecordSettings
    model: PlantModel = PlantModel()
    anti_alias: Filter | None = None


@dataclass(frozen=True)
class RecordEstimate:
    """What the records of one device gave.

    Attributes
    ----------
    estimate
        The response as sampled, hold and filter still in it; None when there are problems.
    plant
        The response of the plant; None when there are problems.
    method, reason
        What was used, and why.
    tally
        What was counted on the way.
    bias
        Of the direct estimate in a closed loop, where it was predicted.
    left_out
        Share of segments or periods left out for dropouts and excursions.
    runout
        Repeatable runout taken out, peak to peak.
    opinion
        Modes found in the first record without a frequency-domain step, or why there are none.
    problems
        What is wrong with the records.
    """

    estimate: EstimatedResponse | None
    method: str
    reason: str
    tally: Tally
    bias: DirectBias | None = None
    left_out: float = 0.0
    runout: float = 0.0
    plant: PlantEstimate | None = None
    opinion: SubspaceModes | str = "not asked for"
    problems: tuple[Problem, ...] = ()


def estimate_record(task: RecordTask) -> RecordEstimate:
    """Estimate one response; what is wrong with its records is returned, not raised."""
    try:
        for file in task.files:
            file.check_period(task.options.sample_period)
        found = _Estimator(task).run()
        assert found.estimate is not None
        plant = plant_estimate(found.estimate, task.options, task.model, task.anti_alias)
        return replace(found, plant=plant, opinion=_second_opinion(task))
    except InputError as error:
        return RecordEstimate(None, "", "", Tally(), problems=error.problems)
    except (ValueError, np.linalg.LinAlgError) as error:
        problem = Problem(task.files[0].place, *_two_parts(str(error)))
        return RecordEstimate(None, "", "", Tally(), problems=(problem,))


def _second_opinion(task: RecordTask) -> SubspaceModes | str:
    if not task.options.second_opinion:
        return "not asked for"
    signals = Signals(task.files[0], task.options)
    places = signals.channels
    if len(places.inputs) != 1 or len(places.outputs) != 1:
        return "made for one drive and one position only"
    record = np.concatenate(list(signals.chunks()), axis=1)
    pair = record[[places.inputs[0], places.outputs[0]]]
    whole = pair[:, _longest_whole(np.isfinite(pair).all(axis=0))]
    return subspace_modes(whole[0], whole[1], task.options.sample_period)


def _longest_whole(good: BoolArray) -> slice:
    """Return the longest stretch without a gap."""
    edges = np.flatnonzero(np.diff(np.concatenate([[False], good, [False]]).astype(int)))
    starts, stops = edges[::2], edges[1::2]
    if starts.size == 0:
        return slice(0, 0)
    longest = int(np.argmax(stops - starts))
    return slice(int(starts[longest]), int(stops[longest]))


def _two_parts(message: str) -> tuple[str, str]:
    found, _, expected = message.removeprefix("found ").partition("; expected ")
    return found, expected or "records long enough for the method"


class _Estimator:
    """The steps of one estimate, which share files, options and counts."""

    def __init__(self, task: RecordTask) -> None:
        self.task, self.options = task, task.options
        self.place = task.files[0].place
        self.tally = Tally()
        self.period = 0
        self.signals = [Signals(file, task.options) for file in task.files]
        self.channels = self.signals[0].channels

    def run(self) -> RecordEstimate:
        method, reason = self._choice()
        if self.options.drive_updates > 1 and method != "multisine":
            words = f"drive_updates = {self.options.drive_updates} with the method {method}"
            raise InputError(Problem(self.place, words, "a periodic excitation (multisine)"))
        if method == "multisine":
            found = self._multisine()
        elif method == "stepped-sine":
            found = self._stepped()
        elif method == "local-polynomial":
            found = self._local()
        else:
            found = self._averaged(method)
        runout = max(signals.runout for signals in self.signals)
        return replace(found, method=method, reason=reason, tally=self.tally, runout=runout)

    def _choice(self) -> tuple[str, str]:
        """Return the method and the reason for it."""
        if self.options.method != "auto":
            if self.options.method == "multisine":
                self.period = self._find_period()
                if not self.period:
                    expected = "an excitation of at least three equal periods"
                    raise InputError(Problem(self.place, "no period", expected))
            return self.options.method, "asked for"
        if self.options.frequency is not None:
            return "stepped-sine", "the record has a channel with the driven frequency"
        self.period = self._find_period()
        if self.period:
            return "multisine", f"the excitation repeats every {self.period} samples"
        averages = SEGMENTS_WANTED
        if self.options.resolution is not None:
            averages = 2 * self._samples() // self._segment()
        if averages < FEWEST_AVERAGES and self._scalar and len(self.signals) == 1:
            return "local-polynomial", f"one record, too short for {FEWEST_AVERAGES} averages"
        if self.channels.open_loop:
            return "direct", "the drive is the excitation: no loop"
        return "joint", "the excitation does not repeat and enters a loop"

    @property
    def _scalar(self) -> bool:
        sizes = (self.channels.excitation, self.channels.drive, self.channels.position)
        return all(len(each) == 1 for each in sizes)

    def _samples(self) -> int:
        return min(s.file.samples(s.channels.excitation[0]) for s in self.signals)

    def _find_period(self) -> int:
        signals = self.signals[0]
        name, kept = signals.channels.excitation[0], []
        for chunk in signals.file.chunks([name]):
            kept.append(chunk[0])
            if sum(part.size for part in kept) >= _PERIOD_SEARCH:
                break
        whole = np.concatenate(kept)
        return excitation_period(whole) if np.isfinite(whole).all() else 0

    def _segment(self) -> int:
        if self.options.resolution is not None:
            return max(16, round(1.0 / (self.options.resolution * self.options.sample_period)))
        longest = 2 * self._samples() // (SEGMENTS_WANTED + 1)
        return int(np.clip(1 << max(0, longest.bit_length() - 1), 64, 1 << 15))

    def _averaged(self, method: str) -> RecordEstimate:
        spectra, left_out = self._spectra()
        places = self.channels
        bias = None
        if method == "direct-input-noise":
            found = input_noise_response(spectra, places.inputs, places.outputs)
        elif places.open_loop:
            found = output_noise_response(spectra, places.inputs, places.outputs)
        else:
            found = joint_response(spectra, places.instruments, places.inputs, places.outputs)
            direct = output_noise_response(spectra, places.inputs, places.outputs)
            bias = direct_bias(direct, found)
            if method == "direct":
                self._refuse_bias(bias)
                found = direct
        return RecordEstimate(found, "", "", self.tally, bias, left_out)

    def _refuse_bias(self, bias: DirectBias) -> None:
        if bias.matters:
            found = (
                f"a closed loop, in which the direct estimate is off by {bias.share_of_error:.2g} "
                "times its own error"
            )
            raise InputError(Problem(self.place, found, 'method "joint" or "auto"'))

    def _spectra(self) -> tuple[AveragedSpectra, float]:
        averager = SpectrumAverager(
            len(self.channels.outputs) + self.channels.outputs[0],
            self._segment(),
            self.options.sample_period,
            window=self.options.window,
            overlap=self.options.overlap,
        )
        for signals in self.signals:
            for chunk in signals.chunks(tally=self.tally):
                averager.add(chunk)
            averager.end_record()
        spectra = averager.result()
        return spectra, averager.left_out / (averager.left_out + spectra.segments)

    def _multisine(self) -> RecordEstimate:
        experiments, left_out, chosen = [], [], None
        for signals in self.signals:
            spectra, share = self._periods(signals, chosen)
            chosen = excited_lines(spectra[0]) if chosen is None else chosen
            lines = spectra if spectra.shape[-1] == chosen.size else spectra[..., chosen]
            kept = lines[:, settled_period(lines) :]
            frequency = chosen / (self.period * self.options.sample_period)
            experiments.append(periodic_lines(kept, frequency))
            left_out.append(share)
        places = self.channels
        found = periodic_response(experiments, places.instruments, places.inputs, places.outputs)
        return RecordEstimate(found, "", "", self.tally, None, float(np.mean(left_out)))

    def _periods(self, signals: Signals, chosen: np.ndarray | None) -> tuple[ComplexArray, float]:
        """Return the spectra of whole periods, and the share of periods left out."""
        kept, seen = [], 0
        for chunk in signals.chunks(size=self.period, tally=self.tally):
            if chunk.shape[1] < self.period:
                break
            seen += 1
            lines = np.fft.rfft(chunk, axis=1) / self.period
            if signals.fast_drive is not None:
                fast = signals.fast_drive
                lines[self.channels.inputs] = (
                    np.fft.rfft(fast, axis=1)[:, : lines.shape[1]] / fast.shape[1]
                )
            if np.isfinite(lines).all():
                kept.append(lines if chosen is None else lines[:, chosen])
        if len(kept) < 3:
            found = f"{len(kept)} whole periods of {self.period} samples without a gap"
            raise InputError(Problem(signals.file.place, found, "at least 3"))
        return np.stack(kept, axis=1), 1.0 - len(kept) / seen

    def _stepped(self) -> RecordEstimate:
        if self.options.frequency is None or len(self.signals) != 1 or not self._scalar:
            found = "no single record of a scalar plant with a frequency channel"
            raise InputError(Problem(self.place, found, "[records] frequency, one file, 1 x 1"))
        signals = self.signals[0]
        record = np.concatenate(list(signals.chunks(tally=self.tally)), axis=1)
        driven = signals.file.whole([self.options.frequency])[0]
        steps, left_out = [], 0
        for start, stop in dwells(driven):
            settled = record[:, start + int(_SETTLING_SHARE * (stop - start)) : stop]
            if not np.isfinite(settled).all():
                left_out += 1
                continue
            phasors = sine_phasors(settled, float(driven[start]), self.options.sample_period)
            lines = periodic_lines(phasors[:, :, None], driven[start : start + 1])
            steps.append(periodic_response([lines], [0], [1], [2]))
        if len(steps) < 2:
            raise InputError(Problem(self.place, f"{len(steps)} whole dwells", "at least 2"))
        share = left_out / (left_out + len(steps))
        return RecordEstimate(_joined(steps, self.place), "", "", self.tally, None, share)

    def _local(self) -> RecordEstimate:
        if len(self.signals) != 1 or not self._scalar:
            expected = "one record of a plant with one drive and one position"
            raise InputError(Problem(self.place, "several records or channels", expected))
        record = np.concatenate(list(self.signals[0].chunks(tally=self.tally)), axis=1)
        if not np.isfinite(record).all():
            found = "samples that are missing or outside the linear range"
            raise InputError(Problem(self.place, found, "a whole record for this method"))
        lines = record.shape[1] // 2
        step = max(5, lines // _CENTRES_WANTED)
        if self.options.resolution is not None:
            asked = self.options.resolution * record.shape[1] * self.options.sample_period
            step = max(5, round(asked))
        found_response = local_polynomial_response(
            record, self.options.sample_period, 0, 1, 2, neighbours=step - 1
        )
        return RecordEstimate(found_response, "", "", self.tally)


def _joined(steps: list[EstimatedResponse], place: str) -> EstimatedResponse:
    """Join responses of one line each, by increasing frequency."""
    order = np.argsort([each.frequency[0] for each in steps])
    ordered = [steps[k] for k in order]
    frequency = np.concatenate([each.frequency for each in ordered])
    if np.any(np.diff(frequency) <= 0.0):
        raise InputError(Problem(place, "a frequency stepped to twice", "every frequency once"))
    return EstimatedResponse(
        frequency,
        np.concatenate([each.response for each in ordered]),
        np.concatenate([each.variance for each in ordered]),
        np.concatenate([each.coherence for each in ordered]),
        min(each.averages for each in ordered),
        np.ones(1),
        np.ones(len(ordered)),
    )
