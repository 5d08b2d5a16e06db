"""What both banks are: fixed parameters that can be read, and a stream that can be finished."""

__all__ = ["Bank", "same_channels"]


def same_channels(plan, prototype):
    """Refuse a prototype for another number of channels than the plan's."""
    if plan.channels != prototype.channels:
        raise ValueError(
            "plan and prototype must have the same number of channels; got a plan of "
            f"{plan.channels} and a prototype for {prototype.channels}"
        )


class Bank:
    """The parameters of a bank, fixed at construction, and whether its stream goes on.

    A bank keeps its parameters in ``_parameters``, its engine in ``_engine``, the leading axes of
    its stream in ``_lead`` (None before the first push) and ``_finished``.
    """

    @property
    def plan(self):
        """The channel plan."""
        return self._parameters["plan"]

    @property
    def prototype(self):
        """The prototype."""
        return self._parameters["prototype"]

    @property
    def dtype(self):
        """NumPy dtype of the frames."""
        return self._spec.dtype

    @property
    def phase(self):
        """Either "absolute" or "frame"."""
        return self._parameters["phase"]

    @property
    def layout(self):
        """Either "frames" or "channels"."""
        return self._parameters["layout"]

    @property
    def workers(self):
        """Number of threads."""
        return self._parameters["workers"]

    @property
    def engine(self):
        """Which engine runs it: "numba" or "numpy"."""
        return self._engine.name

    def _described(self, names, extras):
        """The repr: plan and prototype, parameters by name, and what else there is to say."""
        held = self._parameters
        shown = [f"{self.plan!r}", f"{self.prototype!r}"]
        shown += [f"{name}={held[name]!r}" for name in names]
        return f"{type(self).__name__}({', '.join([*shown, *extras])}) <{self.engine} engine>"

    def _refuse_finished(self):
        if self._finished:
            raise RuntimeError("the stream is finished; call reset() to start a new one")

    def _refuse_other_lead(self, name, lead):
        if self._lead is not None and lead != self._lead:
            raise ValueError(
                f"{name} must keep the leading axes (antennas) of the first push, "
                f"{self._lead}; got {lead}. Call reset() to start a stream of another shape"
            )

    def __getstate__(self):
        state = {name: value for name, value in vars(self).items() if name in self._kept}
        return {**state, "_engine": self._engine.get_state()}

    def __setstate__(self, state):
        vars(self).update({name: state[name] for name in self._kept})
        self._build()
        self._engine.set_state(state["_engine"])
