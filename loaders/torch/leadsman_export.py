#!/usr/bin/env python3
"""Write a PyTorch image model as a bundle: graph.json, weights.safetensors, reference.safetensors.

    from leadsman_export import export
    export(model, torch.rand(1, 3, 224, 224), "my_model", labels=["horn", "pearl"])

    python3 leadsman_export.py --torchvision resnet18 --checkpoint resnet18.pth --out resnet18

The bundle's format is described in loaders/GRAPH_FORMAT.md. This file needs torch (1.13 or later)
and numpy; torchvision only for its command line, Pillow only for a picture as the example.

How it works, in the order of this file:
  1. errors, and files written whole or not at all;
  2. the model is traced with torch.fx, and every node is run on the example as it is traced: its
     value is the reference, and tells sizes from data;
  3. nodes become layers: a handler for each module type, function or method (tables at "Handlers").
     A tensor between layers is a `Wire`; reshape, permute and the like only change how the next
     operation sees it (`View`), until the axes spell a form that an operator produces (`FORMS`);
  4. `export`, helpers that give untrained models weights worth comparing, what a picture becomes
     as the example, the command line.

Adding support for a module or function is adding one handler: a Python function whose parameters
are those of the torch function it stands for, after `site`, the place in the user's model.
"""

import argparse
import contextlib
import dataclasses
import inspect
import json
import linecache
import math
import operator
import os
import pickle
import re
import sys
import types

import torch
import torch.nn.functional as F
from torch import fx, nn

FORMAT_VERSION = 1


# ---------------------------------------------------------------------------------------------
# Errors


class ExportError(Exception):
    """The model holds something that the graph format cannot say (or this file cannot read).

    The message names what, where in the module tree, the line of source, and what to do;
    `path`, `class_name` and `source` ("file:line") hold these for programs.
    """

    def __init__(self, reason, origin=None, advice=None):
        self.reason, self.advice = reason, advice
        self.path = origin.path if origin else None
        self.class_name = origin.class_name if origin else None
        self.source = f"{origin.file}:{origin.line}" if origin and origin.file else None
        lines = [reason]
        if origin:
            lines.append(f"  module: {origin.path or '(the model itself)'}, a {origin.class_name}")
        if self.source:
            text = linecache.getline(origin.file, origin.line).strip()
            lines.append(f"  source: {self.source}" + (f": {text}" if text else ""))
        if advice:
            lines.append(f"  what to do: {advice}")
        super().__init__("\n".join(lines))


@dataclasses.dataclass(frozen=True)
class Origin:
    """Where in the user's model something was computed."""

    path: str
    class_name: str
    file: str = ""
    line: int = 0


# ---------------------------------------------------------------------------------------------
# Files


@contextlib.contextmanager
def _written_whole(path):
    """A binary file that takes its name only when it is complete."""
    folder, name = os.path.split(os.path.abspath(path))
    temporary = os.path.join(folder, f".{name}.{os.getpid()}.tmp")
    try:
        with open(temporary, "wb") as file:
            yield file
        os.replace(temporary, path)
    except BaseException:
        with contextlib.suppress(FileNotFoundError):
            os.remove(temporary)
        raise


_SAFETENSORS_DTYPES = {
    torch.float64: "F64",
    torch.float32: "F32",
    torch.float16: "F16",
    torch.bfloat16: "BF16",
    torch.uint8: "U8",  # pictures alone
}


def _little_endian_bytes(tensor):
    tensor = tensor.detach().cpu().contiguous()
    if tensor.dtype == torch.bfloat16:  # numpy has no such type: take its bits
        tensor = tensor.view(torch.int16)
    array = tensor.numpy()
    return array.astype(array.dtype.newbyteorder("<"), copy=False).tobytes()


def write_safetensors(path, tensors, metadata=None):
    """Writes {name: tensor}: header length (8 bytes), JSON header, data.

    Wider types come first and the header is padded to a multiple of 8, so that every tensor is
    aligned for its type in a mapped file.
    """
    ordered = sorted(tensors.items(), key=lambda item: -item[1].element_size())
    header = {"__metadata__": metadata} if metadata else {}
    offset = 0
    for name, tensor in ordered:
        end = offset + tensor.numel() * tensor.element_size()
        header[name] = {
            "dtype": _SAFETENSORS_DTYPES[tensor.dtype],
            "shape": list(tensor.shape),
            "data_offsets": [offset, end],
        }
        offset = end
    text = json.dumps(header, separators=(",", ":")).encode("utf-8")
    text += b" " * (-len(text) % 8)
    with _written_whole(path) as file:
        file.write(len(text).to_bytes(8, "little"))
        file.write(text)
        for _, tensor in ordered:
            file.write(_little_endian_bytes(tensor))


def _write_text(path, text):
    with _written_whole(path) as file:
        file.write(text.encode("utf-8"))


def _graph_text(graph):
    """JSON with one layer a line: long graphs stay readable, and diffs short."""
    parts = []
    for key, value in graph.items():
        if key == "layers":
            lines = ",\n".join("    " + json.dumps(layer, ensure_ascii=False) for layer in value)
            parts.append(f'  "layers": [\n{lines}\n  ]')
        else:
            parts.append(f"  {json.dumps(key)}: {json.dumps(value, ensure_ascii=False)}")
    return "{\n" + ",\n".join(parts) + "\n}\n"


# ---------------------------------------------------------------------------------------------
# Tracing: fx records the operations, and each runs on the example at once
#
# Having values beside proxies answers what fx alone cannot: unpacking (`n, c, h, w = x.shape`,
# which fx reads from byte code, wrongly in torch 1.13 under Python 3.11), len(), and decisions
# about sizes. A decision about a tensor's contents stays an error.

_TORCH_FOLDER = os.path.dirname(os.path.abspath(torch.__file__)) + os.sep
_SIZE_QUERIES = frozenset(
    "shape size dim ndim ndimension numel nelement dtype device layout requires_grad is_cuda "
    "is_quantized is_nested is_sparse is_floating_point is_contiguous type names".split()
)
_SIZE_FUNCTIONS = frozenset({torch.is_floating_point, torch.is_complex, torch.numel})
_SAME_FOR_EVERY_PICTURE = (
    "write the forward pass so that it does the same for every picture: no decision, loop or "
    "Python number may depend on the values of a tensor"
)


class _ValueProxy(fx.Proxy):
    """A proxy whose value for the example is known to its tracer."""

    def __getattr__(self, name):
        return _ValueAttribute(self, name)

    def __iter__(self):
        value = self.tracer.value(self.node)
        if isinstance(value, (tuple, list)):
            return iter([self[i] for i in range(len(value))])
        raise self.tracer.error("a loop over a tensor", _SAME_FOR_EVERY_PICTURE)

    def __len__(self):
        return len(self.tracer.value(self.node))

    def __bool__(self):
        return bool(self.tracer.number(self, "a decision"))

    def _as_number(self):
        self.tracer.number(self, "a Python number")
        raise self.tracer.error(
            "a size of the example is turned into a Python number, which would fix it in the graph",
            "leave sizes as they come from x.shape, or use an operation that needs none",
        )

    __int__ = __index__ = __float__ = _as_number

    # Recorded as what they are, so that what else shares the tensor's memory changes with it.
    def __iadd__(self, other):
        return self.tracer.create_proxy("call_function", operator.iadd, (self, other), {})

    def __imul__(self, other):
        return self.tracer.create_proxy("call_function", operator.imul, (self, other), {})

    @classmethod
    def __torch_function__(cls, function, types, args=None, kwargs=None):
        return fx.Proxy.__torch_function__(function, types, args, kwargs)


class _ValueAttribute(_ValueProxy, fx.proxy.Attribute):
    """`proxy.name`: a node of its own unless it is called."""


class _Tracer(fx.Tracer):
    """Traces `module` and keeps, for each node: its value, its origin, whether it is only about
    sizes, a copy of its output as it was then, and which of its arguments it changed in place."""

    proxy_buffer_attributes = True

    def __init__(self, examples):
        super().__init__()
        self.examples = examples  # by the name of forward's parameter
        self.values, self.copies, self.origins, self.changed = {}, {}, {}, {}
        self.sizes = set()
        self._path = []  # (path, class name) of the modules being called
        self._running = False

    # What fx asks of a tracer.

    def create_args_for_root(self, root_fn, is_module, concrete_args=None):
        """The examples become the arguments; what was not given keeps its default."""
        proxies = [self.create_proxy("placeholder", name, (), {}) for name in self.examples]
        return root_fn, [self.root, *proxies]

    def is_leaf_module(self, m, module_qualified_name):
        if find_module_handler(m):
            return True
        # torch.nn's containers and composites have children and are traced through.
        has_children = next(m.children(), None) is not None or isinstance(m, nn.Sequential)
        own_weights = next(m.parameters(recurse=False), None) is not None
        return type(m).__module__.startswith("torch.nn.") and (own_weights or not has_children)

    def call_module(self, m, forward, args, kwargs):
        if self._running:
            return forward(*args, **kwargs)
        depth = len(self._path)
        self._path.append((self.path_of_module(m), type(m).__name__))
        result = super().call_module(m, forward, args, kwargs)
        del self._path[depth:]  # after an error it stays, to say where
        return result

    def getattr(self, attr, attr_val, parameter_proxy_cache):
        if self._running:
            return attr_val
        return super().getattr(attr, attr_val, parameter_proxy_cache)

    def proxy(self, node):
        return _ValueProxy(node, self)

    def create_proxy(self, kind, target, args, kwargs, *rest, **named):
        proxy = super().create_proxy(kind, target, args, kwargs, *rest, **named)
        node = proxy.node
        self.origins[node] = self._here()
        tensors = [n for n in node.all_input_nodes if isinstance(self.value(n), torch.Tensor)]
        versions = [self.value(n)._version for n in tensors]
        value = self.values[node] = self._run(node)
        self.changed[node] = [
            n for n, version in zip(tensors, versions) if self.value(n)._version != version
        ]
        if isinstance(value, torch.Tensor):
            if kind != "get_attr":
                self.copies[node] = value.detach().clone()
        elif self._is_about_sizes(node):
            self.sizes.add(node)
        return proxy

    # What this file asks of it.

    def value(self, node):
        if node not in self.values and node.op == "get_attr":  # made by fx for a constant
            self.values[node] = operator.attrgetter(node.target)(self.root)
        return self.values[node]

    def number(self, proxy, use):
        """The value of a proxy that is about sizes only."""
        if proxy.node not in self.sizes:
            raise self.error(f"{use} depends on the values of a tensor", _SAME_FOR_EVERY_PICTURE)
        return self.value(proxy.node)

    def error(self, reason, advice):
        return ExportError(reason, self._here(), advice)

    def explain(self, error):
        """An ExportError for whatever broke the trace, at the user's line that broke it."""
        trail = error.__traceback__
        origin = self._here()
        while trail:
            file = trail.tb_frame.f_code.co_filename
            if not _is_internal(file):
                origin = dataclasses.replace(origin, file=file, line=trail.tb_lineno)
            trail = trail.tb_next
        reason = f"the forward pass cannot be traced: {type(error).__name__}: {error}"
        return ExportError(reason, origin, _SAME_FOR_EVERY_PICTURE)

    def _here(self):
        path, class_name = self._path[-1] if self._path else ("", type(self.root).__name__)
        frame = sys._getframe(1)
        while frame and _is_internal(frame.f_code.co_filename):
            frame = frame.f_back
        if not frame:
            return Origin(path, class_name)
        return Origin(path, class_name, frame.f_code.co_filename, frame.f_lineno)

    def _run(self, node):
        args = fx.node.map_arg(node.args, self.value)
        kwargs = fx.node.map_arg(node.kwargs, self.value)
        run = {
            "placeholder": lambda: self.examples[node.target],
            "get_attr": lambda: operator.attrgetter(node.target)(self.root),
            "call_function": lambda: node.target(*args, **kwargs),
            "call_method": lambda: getattr(args[0], node.target)(*args[1:], **kwargs),
            "call_module": lambda: self._run_module(node.target, args, kwargs),
        }
        self._running = True
        try:
            return run[node.op]()
        finally:
            self._running = False

    def _run_module(self, path, args, kwargs):
        """Hooks that look on are welcome; one that changes the output is no part of the graph."""
        module = self.root.get_submodule(path)
        if not (module._forward_hooks or module._forward_pre_hooks):
            return module(*args, **kwargs)
        args_, kwargs_ = fx.node.map_aggregate(
            (args, kwargs), lambda a: a.clone() if isinstance(a, torch.Tensor) else a
        )
        result = module(*args, **kwargs)
        for seen, plain in zip(_tensors_of(result), _tensors_of(module.forward(*args_, **kwargs_))):
            if not _agree(seen, plain):
                raise self.error(
                    "a forward hook changes what the module computes",
                    "remove the hook, or write what it does into the module",
                )
        return result

    def _is_about_sizes(self, node):
        query = node.args[1] if node.target is getattr else node.target
        if query in _SIZE_QUERIES or query in _SIZE_FUNCTIONS:
            return True
        sources = node.all_input_nodes
        return bool(sources) and all(source in self.sizes for source in sources)


def _is_internal(file):
    return file.startswith(_TORCH_FOLDER) or os.path.abspath(file) == os.path.abspath(__file__)


def _examples_by_name(module, inputs):
    """Copies of the example tensors by parameter of forward; those of *images are images_0, ..."""
    bound = inspect.signature(type(module).forward).bind(module, *inputs)
    examples = {}
    for name, value in list(bound.arguments.items())[1:]:
        several = bound.signature.parameters[name].kind is inspect.Parameter.VAR_POSITIONAL
        named = {f"{name}_{i}": v for i, v in enumerate(value)} if several else {name: value}
        examples.update((k, v.clone()) for k, v in named.items())
    return examples


@contextlib.contextmanager
def _recorded_builtins(tracer):
    """Functions written in C take no proxies for sizes: those with a handler are recorded here."""
    replaced = []

    def recorded(function):
        def call(*args, **kwargs):
            proxies = []
            fx.node.map_aggregate(
                (args, kwargs), lambda a: proxies.append(a) if isinstance(a, fx.Proxy) else None
            )
            if not proxies:
                return function(*args, **kwargs)
            return tracer.create_proxy("call_function", function, args, kwargs)

        return call

    try:
        for namespace in (torch, F):
            for name, function in list(vars(namespace).items()):
                if isinstance(function, types.BuiltinFunctionType) and function in FUNCTIONS:
                    replaced.append((namespace, name, function))
                    setattr(namespace, name, recorded(function))
        yield
    finally:
        for namespace, name, function in replaced:
            setattr(namespace, name, function)


def _trace(module, inputs):
    """The fx graph of `module` and the tracer that holds the nodes' values."""
    tracer = _Tracer(_examples_by_name(module, inputs))
    attributes = {m: dict(vars(m)) for m in module.modules()}
    try:
        with _recorded_builtins(tracer):
            graph = tracer.trace(module)
        for node in graph.nodes:
            if node.op == "get_attr":
                tracer.value(node)
        return graph, tracer
    except ExportError:
        raise
    except Exception as error:
        raise tracer.explain(error) from error
    finally:
        for m, before in attributes.items():  # fx keeps constants there, forward may keep proxies
            vars(m).clear()
            vars(m).update(before)


# ---------------------------------------------------------------------------------------------
# Values between layers
#
# Sizes have one-letter names: an image is "NCHW", tokens "NTC", features "NC". The program sees a
# wire through axes, each a row of factors: whole axes of the wire or parts that one was split into.
# Written as strings, an image whose positions are merged has the axes ("N", "C", "HW"), a row-major
# reading; channels split into two groups and turned are ("N", "C1C0", "H", "W"). An empty string
# is an axis of size 1 that was put in.


@dataclasses.dataclass(eq=False)
class Wire:
    """A layer's output, or an input of the graph."""

    name: str
    sizes: str  # "NCHW", "NTC", "NC"
    tensor: torch.Tensor  # what PyTorch computed, in this order
    patches: "Wire" = None  # tokens: the image that they came from
    prefix: int = 0  # tokens: how many were put before those of the image

    def size_of(self):
        return dict(zip(self.sizes, self.tensor.shape))


@dataclasses.dataclass(frozen=True)
class Factor:
    """An axis of a wire, or one part of it. Parts are row-major: the last varies fastest."""

    letter: str
    parts: tuple = ()  # the sizes of all parts; empty for the whole axis
    index: int = 0

    def size(self, sizes):
        return self.parts[self.index] if self.parts else sizes[self.letter]

    def __str__(self):
        return self.letter + (str(self.index) if self.parts else "")


def _whole(axes):
    """Factors of axes that are written as letters: ("N", "HW", "C") or "NTC"."""
    return tuple(tuple(Factor(letter) for letter in axis) for axis in axes)


@dataclasses.dataclass(eq=False)
class View:
    """A wire as the traced program sees it; what it cuts out and does to it comes as layers when
    an operation needs it (`Site.settled`)."""

    wire: Wire
    factors: tuple  # for each axis, its factors
    chosen: tuple = ()  # (factor, index): parts of which the program took one
    scaled: float = 1.0  # a number that multiplies it
    normalized: float = 0.0  # its channels are divided by their L2 norm, at least this
    site: "Site" = None  # where it was cut out or scaled

    def __post_init__(self):
        self.factors, self.chosen = _merged(self.factors, self.chosen)

    @property
    def axes(self):
        return tuple("".join(map(str, axis)) for axis in self.factors)

    def is_all(self):
        return not self.chosen and self.scaled == 1.0 and not self.normalized

    def is_plain(self):
        return self.is_all() and self.axes == tuple(self.wire.sizes)

    def axis(self, dim):
        return dim % len(self.factors)

    def sizes(self):
        known = self.wire.size_of()
        return [math.prod(f.size(known) for f in axis) for axis in self.factors]

    def tensor(self):
        """What the program sees, of all of a wire."""
        known = self.wire.size_of()
        seen = [f for axis in self.factors for f in axis]
        stored = sorted(seen, key=lambda f: (self.wire.sizes.index(f.letter), f.index))
        spread = self.wire.tensor.reshape([f.size(known) for f in stored])
        return spread.permute([stored.index(f) for f in seen]).reshape(self.sizes())

    def with_factors(self, factors, **fields):
        return dataclasses.replace(self, factors=tuple(map(tuple, factors)), **fields)


def _replaced(axes, chosen, replacement):
    """Every factor taken through `replacement`, which gives a list of factors for one."""
    axes = tuple(tuple(new for f in axis for new in replacement(f)) for axis in axes)
    return axes, tuple((replacement(f)[0], index) for f, index in chosen)


def _merged(axes, chosen):
    """Parts that stand beside each other as they were before a split are one factor again."""
    for axis in axes:
        for first, second in zip(axis, axis[1:]):
            if first.letter == second.letter and second.index == first.index + 1:
                parts, i = first.parts, first.index
                joined = (*parts[:i], parts[i] * parts[i + 1], *parts[i + 2 :])

                def replacement(f):
                    if f.letter != first.letter:
                        return [f]
                    if f == second:
                        return []
                    parts_left = joined if len(joined) > 1 else ()
                    return [Factor(f.letter, parts_left, f.index - (f.index > i))]

                return _merged(*_replaced(axes, chosen, replacement))
    return axes, chosen


@dataclasses.dataclass(eq=False)
class Constant:
    """A tensor that comes from weights alone; `sources` name those of the module tree."""

    tensor: torch.Tensor
    sources: tuple = ()
    sized: bool = False  # made with the example's sizes


class Size(int):
    """A number taken from the example's shape: good for recognising, not for attributes."""


@dataclasses.dataclass(eq=False)
class Refused:
    """A value that no operator gives; only using it is an error."""

    reason: str
    advice: str


@dataclasses.dataclass(eq=False)
class Scores:
    """q k^T on its way to a softmax and a product with v, which make it attention."""

    query: View
    key: View
    depth: Factor  # the channels of a head, which the product sums over
    axes: tuple  # each "batch", "query" or "key" with the factors there: (kind, factors)
    scale: float
    bias: Constant = None  # added to the scores
    head_scale: Constant = None  # multiplies the scores of each head
    weighted: bool = False  # after the softmax


# Views that a layer of their own produces: (sizes, axes) -> operator, sizes of its output.
FORMS = {
    ("NCHW", ("N", "HW", "C")): ("image_to_tokens", "NTC"),
    ("NCHW", ("N", "CHW")): ("flatten", "NC"),
    ("NTC", ("N", "TC")): ("flatten", "NC"),
    ("NTC", ("N", "C", "T")): ("transpose", "NTC"),
    ("NTC", ("N", "C", "T0", "T1")): ("tokens_to_image", "NCHW"),
    ("NTC", ("N", "T0", "T1", "C")): ("tokens_to_image", "NHWC"),
    ("NC", ("N", "C", "", "")): ("features_to_image", "NCHW"),
    ("NCHW", ("N", "C1C0", "H", "W")): ("channel_shuffle", "NCHW"),
    ("NCHW", ("N", "H0", "W0", "W1H1C")): ("space_to_depth", "NHWC"),
    ("NCHW", ("N", "H0W0", "W1H1C")): ("space_to_depth", "NTC"),
}

# Attributes equal to these are left out of the graph.
ATTRIBUTE_DEFAULTS = {
    "conv2d": {"stride": [1, 1], "padding": [0] * 4, "dilation": [1, 1], "groups": 1},
    "max_pool": {"padding": [0] * 4, "dilation": [1, 1], "ceil_mode": False},
    "avg_pool": {"padding": [0] * 4, "ceil_mode": False, "count_padding": True},
    "mean": {"keep": False},
    "scale": {"factor": 1.0, "offset": 0.0},
    "slice": {"axis": "channels", "start": 0, "count": 0},
    "attention": {"scale": 0.0},
    "window_attention": {"shift": [0, 0], "arrangement": "window", "scale": 0.0, "cosine": False},
    "space_to_depth": {"block": [2, 2], "order": "columns"},
}


def _regrouped(view, shape):
    """`view` reshaped to `shape`: axes are merged, and split where the sizes ask for it; None when
    the sizes do not fit or the pictures of a batch would be mixed."""
    sizes = view.wire.size_of()
    rest = [f for axis in view.factors for f in axis]
    axes, chosen = [], view.chosen
    for wanted in shape:
        axis, product = [], 1
        while rest:
            size = rest[0].size(sizes)
            if product * size <= wanted and (product < wanted or not axis):
                product *= size
                axis.append(rest.pop(0))
                continue
            if product == wanted:
                break
            outer = wanted // product
            if wanted % product or size % outer or rest[0].letter == "N":
                return None
            split = rest[0]
            parts, i = split.parts or (size,), split.index
            finer = (*parts[:i], outer, size // outer, *parts[i + 1 :])

            def replacement(f):
                if f.letter != split.letter:
                    return [f]
                if f == split:
                    return [Factor(f.letter, finer, i), Factor(f.letter, finer, i + 1)]
                return [Factor(f.letter, finer, f.index + (f.index > i))]

            (*axes, axis, rest), chosen = _replaced((*axes, axis, rest), chosen, replacement)
            axis, rest = list(axis), list(rest)
        if product != wanted:
            return None
        axes.append(axis)
    if any(f.size(sizes) != 1 for f in rest):
        return None
    if rest:
        axes[-1] = [*axes[-1], *rest]
    return view.with_factors(axes, chosen=chosen)


def _in_wire_order(tensor, factors, sizes, order):
    """The tensor that the program sees as `factors`, spread and put in the wire's order."""
    seen = [f for axis in factors for f in axis]
    wanted = sorted(seen, key=lambda f: (order.index(f.letter), f.index))
    tensor = tensor.reshape([f.size(sizes) for f in seen])
    tensor = tensor.permute([seen.index(f) for f in wanted])
    of = {letter: [f.size(sizes) for f in wanted if f.letter == letter] for letter in order}
    return tensor.reshape([math.prod(of[letter]) for letter in order]).contiguous()


def _storage(tensor):
    storage = tensor.untyped_storage() if hasattr(tensor, "untyped_storage") else tensor.storage()
    return storage.data_ptr()


# ---------------------------------------------------------------------------------------------
# From nodes to layers


class Builder:
    """Walks the traced graph and collects layers, weights and reference tensors."""

    def __init__(self, module, graph, tracer):
        self.module, self.tracer = module, tracer
        self.nodes = list(graph.nodes)
        self.position = {node: i for i, node in enumerate(self.nodes)}
        self.checkpoint = module.state_dict(keep_vars=True)
        self.checkpoint_names = {}
        for name, tensor in self.checkpoint.items():
            self.checkpoint_names.setdefault(id(tensor), name)
        self.converted = {}  # node -> View, Constant, Python value of Sizes, tuple of these
        self.inputs, self.layers, self.outputs = [], [], []
        self.cut = {}  # parts of wires that are layers already
        self.weights, self.reference = {}, {}
        self.needed = self._needed_nodes()
        self.module_paths = {n.target for n in self.needed if n.op == "call_module"}

    def build(self):
        for node in self.nodes:
            if node in self.needed:
                self.converted[node] = self._convert(node)
                self._follow_changes(node)
        self._drop_unused_layers()

    def _needed_nodes(self):
        """What the output depends on, changes in place of what it depends on included."""
        needed, read = set(), set()
        for node in reversed(self.nodes):
            changes = self.tracer.changed.get(node, ())
            if (
                node.op in ("output", "placeholder")
                or node in needed
                or any(_storage(self.tracer.value(n)) in read for n in changes)
            ):
                needed.add(node)
                for source in node.all_input_nodes:
                    needed.add(source)
                    value = self.tracer.value(source)
                    if isinstance(value, torch.Tensor):
                        read.add(_storage(value))
        return needed

    def _convert(self, node):
        if node.op == "placeholder":
            return self._input(node)
        if node.op == "output":
            return self._output(node)
        value = self.tracer.value(node)
        if node in self.tracer.sizes:
            return self._size(node, value)
        sources = [self.converted.get(n) for n in node.all_input_nodes]
        if node.op == "get_attr":
            return Constant(value, (node.target,))
        if not any(_depends_on_input(source) for source in sources):
            return self._constant(node, value, sources)
        site = Site(self, node)
        return find_handler(site)(
            site,
            *fx.node.map_arg(node.args, self._argument),
            **fx.node.map_arg(node.kwargs, self._argument),
        )

    def _argument(self, node):
        return self.converted[node]

    def _input(self, node):
        value = self.tracer.value(node)
        origin = self.tracer.origins[node]
        kinds = {4: ("image", "NCHW"), 3: ("tokens", "NTC"), 2: ("features", "NC")}
        if value.dim() not in kinds or not value.is_floating_point():
            raise ExportError(
                f"the input {node.target} is {value.dtype} of shape {list(value.shape)}",
                origin,
                "inputs are images [N, C, H, W], tokens [N, T, C] or features [N, C] of floats",
            )
        name, sizes = kinds[value.dim()]
        if len(self.tracer.examples) > 1 or name in self.module_paths:
            name = node.target
        wire = Wire(self.unique_name(name, functional=True), sizes, self.tracer.copies[node])
        free = {"N": "N", "H": "H", "W": "W", "T": "T"}
        entry = {"name": wire.name, "shape": [free.get(s, n) for s, n in wire.size_of().items()]}
        if sizes == "NCHW":
            entry["usual_size"] = list(value.shape[2:])
        self.inputs.append(entry)
        self.reference[wire.name] = wire.tensor
        return View(wire, _whole(sizes))

    def _output(self, node):
        values = []
        fx.node.map_arg(node.args[0], lambda n: values.append(self.converted[n]))
        site = Site(self, node)
        for value in values:
            if isinstance(value, (Constant, int, float)):
                site.fail(
                    "an output of the model does not depend on its input",
                    "return only tensors that are computed from the input",
                )
            self.outputs.append(site.plain(value, "NCHW", "NTC", "NC", "NhTS").wire.name)
        if not self.outputs:
            site.fail("the model returns no tensor", "return one or more tensors")
        return None

    def _size(self, node, value):
        """A number or tuple with the example's sizes marked. Channels are the model's own."""
        arguments = fx.node.map_arg(node.args, self._argument)
        query = arguments[1] if node.target is getattr else node.target
        if node.target is operator.getitem:
            return arguments[0][arguments[1]]
        if query in ("shape", "size") and isinstance(arguments[0], View):
            view = arguments[0]
            shape = self.tracer.value(node.args[0]).shape
            # Of channels, and of axes that the program put in.
            own = (all(f.letter == "C" for f in axis) for axis in view.factors)
            sizes = tuple(n if fixed else Size(n) for n, fixed in zip(shape, own))
            dim = node.kwargs.get(
                "dim", arguments[1] if query == node.target and arguments[1:] else None
            )
            return sizes if dim is None else sizes[dim]
        marked = query in ("numel", "nelement", torch.numel) or _holds_size(arguments)
        return fx.node.map_aggregate(value, _as_size) if marked else value

    def _constant(self, node, value, sources):
        if not isinstance(value, torch.Tensor):
            return value
        parts = [source for source in sources if isinstance(source, Constant)]
        sized = _holds_size(sources)
        names = tuple(dict.fromkeys(name for part in parts for name in part.sources))
        return Constant(self.tracer.copies[node], names, sized or any(p.sized for p in parts))

    def _follow_changes(self, node):
        """After a change in place, whatever shared the memory is the layer that changed it."""
        for changed in self.tracer.changed.get(node, ()):
            before, after = self.converted.get(changed), self.converted[node]
            memory = _storage(self.tracer.value(changed))
            for other in self.nodes[: self.position[node]]:
                value = self.tracer.values.get(other)
                if not isinstance(value, torch.Tensor) or _storage(value) != memory:
                    continue
                if not any(self.position[user] > self.position[node] for user in other.users):
                    continue
                seen = self.converted.get(other)
                views = (seen, before, after)
                if not all(isinstance(v, View) and v.is_all() for v in views) or (
                    seen.wire is not before.wire or after.wire.sizes != seen.wire.sizes
                ):
                    raise ExportError(
                        f"{node.name} changes a tensor in place of which {other.name} is a part",
                        self.tracer.origins[node],
                        "use the operation that is not in place",
                    )
                self.converted[other] = dataclasses.replace(seen, wire=after.wire)

    def _drop_unused_layers(self):
        used, kept = set(self.outputs), []
        for layer in reversed(self.layers):
            if layer["name"] in used:
                used.update(layer["inputs"])
                kept.append(layer)
        self.layers = kept[::-1]
        tensors = {name for layer in kept for name in layer.get("weights", {}).values()}
        self.weights = {n: t for n, t in self.weights.items() if n in tensors}
        named = {entry["name"] for entry in self.inputs} | {layer["name"] for layer in kept}
        self.reference = {n: t for n, t in self.reference.items() if n in named}

    # For sites.

    def unique_name(self, wanted, functional):
        """A free name; a function's never takes that of a module."""
        wanted = wanted.replace(":", "_")
        name, count = wanted, 0
        while name in self.reference or (functional and name in self.module_paths):
            count += 1
            name = f"{wanted}_{count}"
        return name

    def weight_name(self, site, layer_name, role, constant):
        """The checkpoint's name of a tensor; one computed from the checkpoint gets a new name."""
        tensor = constant.tensor
        if not (tensor.is_floating_point() and tensor.dtype in _SAFETENSORS_DTYPES):
            site.fail(f"a weight of type {tensor.dtype}", "use floating-point weights")
        name = self.checkpoint_names.get(id(tensor)) or self.cut.get(id(tensor), (None,))[0]
        for source in () if name else constant.sources:
            original = self.checkpoint.get(source)
            if original is not None and torch.equal(original.detach(), tensor.detach()):
                name = source
        if name is None and constant.sized:
            site.fail(
                f"the weight made from {', '.join(constant.sources) or 'sizes'} holds only for the "
                "example's size",
                "apply the whole parameter; position_embed fits positions to other sizes by itself",
            )
        if name is None:
            name = f"{layer_name}.{role}"
            while name in self.checkpoint or name in self.weights:
                name += "_"
            self.cut[id(tensor)] = (name, tensor)  # another layer may use it, too
            tensor = tensor.detach().clone()
        self.weights.setdefault(name, tensor)
        return name

    def add_layer(self, site, name, operator_name, inputs, attributes, weights, wire):
        layer = {"name": name, "operator": operator_name, "inputs": [v.wire.name for v in inputs]}
        defaults = ATTRIBUTE_DEFAULTS.get(operator_name, {})
        attributes = {k: v for k, v in attributes.items() if k not in defaults or defaults[k] != v}
        if attributes:
            layer["attributes"] = attributes
        weights = {
            role: self.weight_name(site, name, role, _as_constant(value))
            for role, value in weights.items()
            if value is not None
        }
        if weights:
            layer["weights"] = weights
        self.layers.append(layer)
        self.reference[name] = wire.tensor


def _as_size(value):
    return Size(value) if type(value) is int else value


def _holds_size(value):
    if isinstance(value, (tuple, list)):
        return any(_holds_size(item) for item in value)
    return isinstance(value, Size)


def _as_constant(value):
    return value if isinstance(value, Constant) else Constant(value)


def _depends_on_input(value):
    if isinstance(value, (tuple, list)):
        return any(_depends_on_input(item) for item in value)
    return isinstance(value, (View, Refused, Scores))


class Site:
    """One node as its handler sees it: where it stands, what PyTorch computed, what it emits."""

    def __init__(self, builder, node):
        self.builder, self.node = builder, node
        self.origin = builder.tracer.origins.get(node) or Origin("", type(builder.module).__name__)
        self.value = builder.tracer.values.get(node)
        self.result = builder.tracer.copies.get(node)
        self.is_module = node.op == "call_module"
        self.module = builder.module.get_submodule(node.target) if self.is_module else None

    def fail(self, reason, advice):
        raise ExportError(reason, self.origin, advice)

    @property
    def operation(self):
        """The module's class or the function's name, for messages."""
        target = self.node.target
        return type(self.module).__name__ if self.is_module else getattr(target, "__name__", target)

    # Arguments.

    def view(self, value):
        if isinstance(value, View):
            return value
        if isinstance(value, Refused):
            self.fail(value.reason, value.advice)
        if isinstance(value, Scores):
            self.fail(
                f"{self.operation} is given the product of {value.query.wire.name} and "
                f"{value.key.wire.name}, which is understood only as attention",
                "write softmax(q @ k.transpose(-2, -1) * scale, -1) @ v",
            )
        return self.fail(
            f"{self.operation} is given {type(value).__name__.lower()} where it needs a tensor "
            "computed from the input",
            "no operator takes a constant here; fold it into a neighbouring layer's weights",
        )

    def settled(self, value):
        """A view of all of a wire: what it cut out or scaled has become layers."""
        view = self.view(value)
        if view.is_all():
            return view
        key = (view.wire.name, view.factors, view.chosen, view.scaled, view.normalized)
        if key not in self.builder.cut:
            self.builder.cut[key] = view.site.cut_out(view)
        return self.builder.cut[key]

    def plain(self, value, *allowed):
        """A view that is a wire as it stands, of one of the allowed kinds ("NCHW", ...)."""
        view = self.settled(value)
        if not view.is_plain() and view.site:
            view = view.site.rearranged(view) or view
        if not view.is_plain() or (allowed and view.wire.sizes not in allowed):
            names = {
                "NCHW": "an image [N, C, H, W]",
                "NTC": "tokens [N, T, C]",
                "NC": "features [N, C]",
            }
            wanted = [names[a] for a in allowed or names if a in names]
            self.fail(
                f"{self.operation} needs {' or '.join(wanted)}, but gets {self.shown(view)}",
                "rearrange the tensor before this operation",
            )
        return view

    def shown(self, view):
        parts = {f: f.size(view.wire.size_of()) for axis in view.factors for f in axis if f.parts}
        sizes = ", ".join(f"{f} = {n}" for f, n in parts.items())
        return (
            f"{view.wire.name} with the axes [{', '.join(axis or '1' for axis in view.axes)}]"
            + (f" ({sizes})" if sizes else "")
        )

    def last_is_channels(self, value):
        view = self.settled(value)
        if view.axes[-1] != "C":
            view = self.plain(view)
        return view

    def same_form(self, values):
        views = [self.settled(value) for value in values]
        if len({(view.factors, view.wire.sizes) for view in views}) > 1:
            views = [self.plain(view) for view in views]
        first = views[0]
        for view in views[1:]:
            if view.wire.sizes != first.wire.sizes:
                self.fail(
                    f"{self.operation} joins {first.wire.name} and {view.wire.name} of other axes",
                    "bring both to the same order of axes",
                )
        return views

    def fixed(self, value, what):
        """An attribute's value, refused when it came from the example's size."""
        items = value if isinstance(value, (tuple, list)) else [value]
        if any(isinstance(item, Size) for item in items):
            self.fail(
                f"{what} of {self.operation} is computed from the image's size",
                "use a number that does not depend on the image's size",
            )
        return value

    def pair(self, value, what):
        value = self.fixed(value, what)
        items = list(value) if isinstance(value, (tuple, list)) else [value, value]
        return [int(item) for item in (items * 2 if len(items) == 1 else items)]

    def sides(self, value):
        """[top, left, bottom, right] of a padding given as one number or a pair."""
        height, width = self.pair(value, "padding")
        return [height, width, height, width]

    # Layers.

    def name(self, short):
        if self.is_module:
            return self.node.target
        return f"{self.origin.path}.{short}" if self.origin.path else short

    def short_name(self):
        name = str(getattr(self.node.target, "__name__", self.node.target)).strip("_")
        return {"iadd": "add", "imul": "mul"}.get(name, name)

    def layer(
        self, operator_name, inputs, attributes=None, weights=None, *,
        sizes=None, factors=None, short=None, name=None, tensor=None, result=None, size_of=None,
        **wire_fields,
    ):  # fmt: skip
        """Emits a layer and returns the view of its output that the program sees.

        By default the output has the first input's sizes and factors. `sizes` names those of
        another kind. The reference is `result`, by default the node's value, put back into the
        wire's order, unless `tensor` is given in that order; `size_of` overrides sizes that changed
        within merged axes.
        """
        first = inputs[0]
        factors = factors or (_whole(sizes) if sizes else first.factors)
        sizes = sizes or first.wire.sizes
        name = self.builder.unique_name(
            name or self.name(short or self.short_name()), not self.is_module
        )
        if tensor is None:
            result = self.result if result is None else result
            known = {**first.wire.size_of(), **(size_of or {})}
            for axis, n in zip(factors, result.shape):
                if len(axis) == 1 and not axis[0].parts:
                    known[axis[0].letter] = n
            tensor = _in_wire_order(result, factors, known, sizes)
        if sizes == first.wire.sizes == "NTC":
            wire_fields = {
                "patches": first.wire.patches,
                "prefix": first.wire.prefix,
                **wire_fields,
            }
        wire = Wire(name, sizes, tensor, **wire_fields)
        self.builder.add_layer(
            self, name, operator_name, inputs, attributes or {}, weights or {}, wire
        )
        return View(wire, factors, site=self)

    def see(self, view, factors, **fields):
        """The same wire with other factors; a layer at once when an operator produces that form,
        except for turned tokens, which may turn back."""
        view = view.with_factors(factors, site=self, **fields)
        if not view.is_all() or view.axes == ("N", "C", "T"):
            return view
        return self.rearranged(view) or view

    def rearranged(self, view):
        """The layer that produces what this view, of all of a wire, shows; None without one."""
        operator_name, order = FORMS.get((view.wire.sizes, view.axes), (None, None))
        if not operator_name:
            return None
        inputs = [View(view.wire, _whole(view.wire.sizes))]
        parts = {f.letter: f.parts for axis in view.factors for f in axis if f.parts}
        attributes, fields, factors = {}, {}, _whole(order)
        sizes = "NCHW" if order == "NHWC" else order
        if operator_name == "image_to_tokens":
            fields = {"patches": view.wire}
        elif operator_name == "transpose":
            fields = {"patches": None, "prefix": 0}
        elif operator_name == "channel_shuffle":
            attributes = {"groups": parts["C"][0]}
        elif operator_name == "space_to_depth":
            attributes = {"block": [parts["H"][1], parts["W"][1]]}
        elif operator_name == "tokens_to_image":
            patches = view.wire.patches
            if not patches or view.wire.prefix or parts["T"] != patches.tensor.shape[2:]:
                return None
            inputs.append(View(patches, _whole("NCHW")))
        return self.layer(
            operator_name, inputs, attributes, sizes=sizes, factors=factors, short=operator_name,
            result=view.tensor(), **fields,
        )  # fmt: skip

    def cut_out(self, view):
        """Layers for the channels that a view of this site's took, normalised and scaled."""
        wire, factors = view.wire, view.factors
        seen = View(wire, _whole(wire.sizes))
        if view.chosen:
            (factor, index), *more = view.chosen
            if more or factor.letter != "C" or factor.index != 0:
                self.fail(
                    f"a part of {wire.name} that is not a run of its channels: "
                    f"{', '.join(f'{f} = {i}' for f, i in view.chosen)}",
                    "take channels out with chunk, split or a slice along the channel axis",
                )
            count = math.prod(factor.parts[1:])
            factors = _channel_factors(factors, factor)
            if factors is None:
                self.fail(
                    f"one channel of {wire.name} without an axis for channels",
                    "keep the axis: x[:, c:c + 1]",
                )
            axis = wire.sizes.index("C")
            seen = self.layer(
                "slice", [seen], {"start": index * count, "count": count},
                factors=_whole(wire.sizes), short="slice",
                tensor=wire.tensor.narrow(axis, index * count, count).contiguous(),
            )  # fmt: skip
        if view.normalized:
            if any(f.letter == "C" and f.parts for axis in factors for f in axis):
                self.fail(
                    f"heads of {wire.name} are normalised outside of attention",
                    "normalise q and k, and multiply them as attention does",
                )
            axis = wire.sizes.index("C")
            seen = self.layer(
                "l2_normalize", [seen], {"eps": view.normalized}, short="normalize",
                tensor=F.normalize(seen.wire.tensor, dim=axis, eps=view.normalized),
            )  # fmt: skip
        if view.scaled != 1.0:
            seen = self.layer(
                "scale", [seen], {"factor": view.scaled}, short="scale",
                tensor=seen.wire.tensor * view.scaled,
            )  # fmt: skip
        return View(seen.wire, factors, site=self)


def _channel_factors(factors, taken):
    """The factors of a view after the part `taken` of the channels, the first, is a wire's own."""
    if taken.parts:
        parts = taken.parts[1:]

        def replacement(f):
            if f.letter != "C":
                return [f]
            return [Factor("C", parts if len(parts) > 1 else (), f.index - 1)]

        return _replaced(factors, (), replacement)[0]
    if () not in factors:
        return None
    place = factors.index(())
    return (*factors[:place], (Factor("C"),), *factors[place + 1 :])


# ---------------------------------------------------------------------------------------------
# Handlers: tables

MODULES = {}  # module type, or its full name where importing it is optional -> handler
FUNCTIONS = {}  # function, or its full name -> handler
METHODS = {}  # name of a tensor's method -> handler


def handles(*keys):
    """Registers a handler for module types, functions and names: "relu" is a tensor's method;
    a name with dots is a function or a module type that need not be importable."""

    def register(handler):
        for key in keys:
            name = key.rpartition(".") if isinstance(key, str) else ("", "", "")
            if isinstance(key, type) or (name[0] and name[2][0].isupper()):
                table = MODULES
            else:
                table = METHODS if isinstance(key, str) and not name[0] else FUNCTIONS
            table[key] = handler
        return handler

    return register


def find_module_handler(module):
    """The handler of the module's type or of one that it inherits its forward from."""
    for base in type(module).__mro__:
        handler = MODULES.get(base) or MODULES.get(f"{base.__module__}.{base.__qualname__}")
        if handler:
            return handler if type(module).forward is base.forward else None
    return None


def find_handler(site):
    target = site.node.target
    if site.is_module:
        handler = find_module_handler(site.module)
        if handler:
            return lambda site, *args, **kwargs: handler(site, site.module, *args, **kwargs)
        kind = type(site.module)
        site.fail(
            f"no operator for the module {kind.__module__}.{kind.__qualname__}",
            "replace it by modules that have one (loaders/GRAPH_FORMAT.md lists the operators)",
        )
    handler = {"call_function": FUNCTIONS, "call_method": METHODS}[site.node.op].get(target)
    if handler is None and site.node.op == "call_function":
        full_name = f"{getattr(target, '__module__', '')}.{getattr(target, '__qualname__', '')}"
        handler = FUNCTIONS.get(full_name)
    if handler is None:
        kind = {"call_function": "function", "call_method": "method"}[site.node.op]
        where = getattr(target, "__module__", None)
        site.fail(
            f"no operator for the {kind} {where + '.' if where else ''}{site.operation}",
            "replace it by operations that have one (loaders/GRAPH_FORMAT.md lists the operators)",
        )
    return handler


# ---------------------------------------------------------------------------------------------
# Handlers: convolution and linear


@handles(torch.conv2d, F.conv2d)
def _conv2d(site, input, weight, bias=None, stride=1, padding=0, dilation=1, groups=1):
    image = site.plain(input, "NCHW")
    kernel = list(_as_constant(weight).tensor.shape[2:])
    dilation = site.pair(dilation, "dilation")
    if padding == "same":  # as torch does: the odd pixel goes to the bottom and the right
        total = [d * (k - 1) for d, k in zip(dilation, kernel)]
        before = [t // 2 for t in total]
        padding = before + [t - b for t, b in zip(total, before)]
    else:
        padding = site.sides(0 if padding == "valid" else padding)
    attributes = {
        "kernel_size": kernel,
        "stride": site.pair(stride, "stride"),
        "padding": padding,
        "dilation": dilation,
        "groups": site.fixed(groups, "groups"),
    }
    return site.layer("conv2d", [image], attributes, {"weight": weight, "bias": bias}, sizes="NCHW")


@handles(nn.Conv2d)
def _conv2d_module(site, m, input):
    if m.padding_mode != "zeros":
        site.fail(f"padding_mode {m.padding_mode!r}", "only padding with zeros has an operator")
    return _conv2d(site, input, m.weight, m.bias, m.stride, m.padding, m.dilation, m.groups)


@handles(F.linear, torch._C._nn.linear)
def _linear(site, input, weight, bias=None):
    view = site.last_is_channels(input)
    return site.layer("linear", [view], {}, {"weight": weight, "bias": bias})


@handles(nn.Linear)
def _linear_module(site, m, input):
    return _linear(site, input, m.weight, m.bias)


# ---------------------------------------------------------------------------------------------
# Handlers: normalisation


@handles(F.batch_norm)
def _batch_norm(
    site, input, running_mean, running_var, weight=None, bias=None,
    training=False, momentum=0.1, eps=1e-5,
):  # fmt: skip
    if training or running_mean is None:
        site.fail(
            f"{site.operation} uses the statistics of the batch",
            "track running statistics and normalise by them",
        )
    view = site.settled(input)
    if len(view.axes) < 2 or view.axes[1] != "C":
        view = site.plain(view, "NCHW", "NC")
    weights = {"weight": weight, "bias": bias, "mean": running_mean, "variance": running_var}
    return site.layer("batch_norm", [view], {"eps": float(eps)}, weights)


@handles(nn.BatchNorm1d, nn.BatchNorm2d)
def _batch_norm_module(site, m, input):
    return _batch_norm(site, input, m.running_mean, m.running_var, m.weight, m.bias, eps=m.eps)


@handles(F.layer_norm, torch.layer_norm)
def _layer_norm(site, input, normalized_shape, weight=None, bias=None, eps=1e-5, cudnn_enable=True):
    if len(normalized_shape) != 1:
        site.fail(
            f"{site.operation} over {len(normalized_shape)} axes",
            "normalise over the channels of each position only",
        )
    view = site.last_is_channels(input)
    return site.layer("layer_norm", [view], {"eps": float(eps)}, {"weight": weight, "bias": bias})


@handles(nn.LayerNorm)
def _layer_norm_module(site, m, input):
    return _layer_norm(site, input, m.normalized_shape, m.weight, getattr(m, "bias", None), m.eps)


@handles(F.group_norm, torch.group_norm)
def _group_norm(site, input, num_groups, weight=None, bias=None, eps=1e-5, cudnn_enabled=True):
    attributes = {"groups": num_groups, "eps": float(eps)}
    weights = {"weight": weight, "bias": bias}
    return site.layer("group_norm", [site.plain(input, "NCHW")], attributes, weights)


@handles(nn.GroupNorm)
def _group_norm_module(site, m, input):
    return _group_norm(site, input, m.num_groups, m.weight, m.bias, m.eps)


@handles(F.local_response_norm)
def _local_response_norm(site, input, size, alpha=1e-4, beta=0.75, k=1.0):
    attributes = {"size": size, "alpha": float(alpha), "beta": float(beta), "k": float(k)}
    return site.layer("local_response_norm", [site.plain(input, "NCHW")], attributes)


@handles(nn.LocalResponseNorm)
def _local_response_norm_module(site, m, input):
    return _local_response_norm(site, input, m.size, m.alpha, m.beta, m.k)


@handles(F.normalize)
def _normalize(site, input, p=2.0, dim=1, eps=1e-12, out=None):
    view = site.view(input)
    along = view.factors[view.axis(dim)]
    if p != 2 or [f.letter for f in along] != ["C"]:
        site.fail(f"normalize with p={p} along axis {dim}", "divide by the L2 norm of the channels")
    if along[0].parts or view.chosen:  # of heads: the product of queries and keys takes it in
        return dataclasses.replace(view, normalized=float(eps), site=site)
    return site.layer("l2_normalize", [site.settled(view)], {"eps": float(eps)}, short="normalize")


# ---------------------------------------------------------------------------------------------
# Handlers: activations

# kind -> module types, functions, methods. Those with an argument of their own follow below.
ACTIVATIONS = {
    "relu": (nn.ReLU, F.relu, F.relu_, torch.relu, torch.relu_, "relu", "relu_"),
    "relu6": (nn.ReLU6, F.relu6),
    "silu": (nn.SiLU, F.silu),
    "mish": (nn.Mish, F.mish),
    "sigmoid": (nn.Sigmoid, torch.sigmoid, torch.sigmoid_, F.sigmoid, "sigmoid", "sigmoid_"),
    "hard_sigmoid": (nn.Hardsigmoid, F.hardsigmoid),
    "hard_swish": (nn.Hardswish, F.hardswish),
    "tanh": (nn.Tanh, torch.tanh, torch.tanh_, F.tanh, "tanh", "tanh_"),
}


def _activation(site, input, kind, **attributes):
    return site.layer("activation", [site.settled(input)], {"kind": kind, **attributes})


def _register_activation(kind, keys):
    @handles(*(key for key in keys if not isinstance(key, type)))
    def function(site, input, inplace=False):
        return _activation(site, input, kind)

    @handles(*(key for key in keys if isinstance(key, type)))
    def module(site, m, input):
        return _activation(site, input, kind)


for _kind, _keys in ACTIVATIONS.items():
    _register_activation(_kind, _keys)


@handles(F.leaky_relu, F.leaky_relu_)
def _leaky_relu(site, input, negative_slope=0.01, inplace=False):
    return _activation(site, input, "leaky_relu", slope=float(negative_slope))


@handles(nn.LeakyReLU)
def _leaky_relu_module(site, m, input):
    return _leaky_relu(site, input, m.negative_slope)


@handles(F.elu, F.elu_)
def _elu(site, input, alpha=1.0, inplace=False):
    return _activation(site, input, "elu", alpha=float(alpha))


@handles(nn.ELU)
def _elu_module(site, m, input):
    return _elu(site, input, m.alpha)


@handles(F.softplus)
def _softplus(site, input, beta=1.0, threshold=20.0):
    if beta != 1 or threshold < 20:
        site.fail(
            f"softplus with beta={beta:g} and threshold={threshold:g}",
            "only log(1 + e^x) is known: beta=1, and the default threshold or a larger one",
        )
    return _activation(site, input, "softplus")


@handles(nn.Softplus)
def _softplus_module(site, m, input):
    return _softplus(site, input, m.beta, m.threshold)


@handles(F.gelu)
def _gelu(site, input, approximate="none"):
    return _activation(site, input, {"none": "gelu", "tanh": "gelu_tanh"}[approximate])


@handles(nn.GELU)
def _gelu_module(site, m, input):
    return _gelu(site, input, getattr(m, "approximate", "none"))


@handles(F.softmax, torch.softmax, "softmax")
def _softmax(site, input, dim=None, _stacklevel=3, dtype=None):
    if isinstance(input, Scores):
        return _weighted(site, input, dim)
    view = site.settled(input)
    if dim is None:  # torch's own choice when none is given
        dim = 0 if len(view.axes) in (0, 1, 3) else 1
    if view.axes[view.axis(dim)] != "C":
        site.fail(
            f"softmax along axis {dim} of {view.wire.name}",
            "softmax runs over the channels of tokens or features",
        )
    return site.layer("softmax", [view])


@handles(nn.Softmax)
def _softmax_module(site, m, input):
    return _softmax(site, input, m.dim)


# ---------------------------------------------------------------------------------------------
# Handlers: arithmetic


@handles(operator.add, operator.iadd, torch.add, "add", "add_")
def _add(site, input, other, *, alpha=1):
    if not _depends_on_input(input):
        input, other = other, input
        if alpha != 1:
            site.fail(f"add with alpha={alpha}", "scale in a layer of its own")
    if alpha != 1:
        other = _mul(site, other, alpha)
    if isinstance(input, Scores):
        return _scores_bias(site, input, other)
    if isinstance(other, Constant):
        return _add_constant(site, input, other)
    if isinstance(other, (int, float)):
        return _scale(site, site.settled(input), "add", offset=float(other))
    views = site.same_form([input, other])
    if views[0].wire.tensor.shape != views[1].wire.tensor.shape:
        site.fail(
            f"{site.operation} repeats one of its operands along an axis",
            "both operands of an addition need the same shape",
        )
    return site.layer("add", views)


def _add_constant(site, input, constant):
    view = _upright(site, input)
    if view.wire.sizes == "NTC" and constant.tensor.shape[-2:] == view.wire.tensor.shape[-2:]:
        return _position_embed(site, view, constant)
    weight = _by_channel(site, view, constant)
    if not isinstance(weight, Constant):
        return _scale(site, view, "add", offset=weight)
    return _scale(site, view, "add", bias=weight, by=constant)


def _upright(site, value):
    """Settled, and tokens that were turned for a mixing layer turned back."""
    view = site.settled(value)
    return site.plain(view) if view.axes == ("N", "C", "T") else view


def _scale(site, view, short, factor=1.0, offset=0.0, weight=None, bias=None, by=None):
    """One value for all or one a channel; `by` is the channels' constant as the program sees it.
    The result is computed here: the node may go on with it."""
    result = view.tensor() * factor + offset if weight is None and bias is None else (
        view.tensor() * by.tensor if bias is None else view.tensor() + by.tensor
    )  # fmt: skip
    return site.layer(
        "scale", [view], {"factor": factor, "offset": offset}, {"weight": weight, "bias": bias},
        short=short, result=result.detach(),
    )  # fmt: skip


def _by_channel(site, view, constant):
    """A constant that is broadcast over a view: one number, or one for each channel."""
    tensor = constant.tensor.detach()
    if tensor.numel() == 1:
        return float(tensor)
    shape = [1] * (len(view.axes) - tensor.dim()) + list(tensor.shape)
    channels = [n for n, axis in zip(shape, view.axes) if axis == "C"]
    if len(shape) != len(view.axes) or channels != [tensor.numel()]:
        site.fail(
            f"{site.operation} joins {site.shown(view)} and a constant of shape "
            f"{list(tensor.shape)}",
            "constants can be numbers, or have one value for each channel",
        )
    for name in constant.sources:
        source = site.builder.checkpoint.get(name)
        if source is not None and torch.equal(source.detach().flatten(), tensor.flatten()):
            return Constant(source, (name,), constant.sized)
    return _computed(constant, tensor.flatten())


@handles(operator.sub, operator.isub, torch.sub, "sub", "sub_")
def _sub(site, input, other, *, alpha=1):
    if isinstance(other, Constant):
        return _add(site, input, _computed(other, other.tensor * -alpha))
    return _add(site, input, _mul(site, other, -alpha))


@handles(torch.addcmul, "addcmul")
def _addcmul(site, input, tensor1, tensor2, *, value=1):
    return _add(site, input, _mul(site, _mul(site, tensor1, tensor2), value))


@handles(operator.neg, torch.neg, "neg")
def _neg(site, input):
    return _mul(site, input, -1)


def _computed(constant, tensor):
    return dataclasses.replace(constant, tensor=tensor)


@handles(operator.mul, operator.imul, torch.mul, torch.multiply, "mul", "mul_", "multiply")
def _mul(site, input, other):
    if not _depends_on_input(input):
        input, other = other, input
    if not _depends_on_input(input):  # two numbers
        return input * other
    if isinstance(other, Constant) and other.tensor.numel() == 1:
        other = float(other.tensor)
    if isinstance(other, (int, float)) and other == 1:
        return input
    if isinstance(input, Scores):
        return _scores_scaled(site, input, other)
    view = site.view(input)
    if isinstance(other, (int, float)):
        heads = any(f.letter == "C" and f.parts for axis in view.factors for f in axis)
        if view.chosen or heads:  # the product of queries and keys takes it in
            return dataclasses.replace(view, scaled=view.scaled * float(other), site=site)
        return _scale(site, site.settled(view), "mul", factor=float(other))
    if isinstance(other, Constant):
        view = _upright(site, view)
        return _scale(site, view, "mul", weight=_by_channel(site, view, other), by=other)
    views = site.same_form([view, other])
    shapes = [list(view.wire.tensor.shape) for view in views]
    if shapes[0] != shapes[1]:
        if _is_factor(views[1], views[0]):
            views.reverse()
        elif not _is_factor(views[0], views[1]):
            site.fail(
                f"{site.operation} multiplies shapes {shapes[0]} and {shapes[1]}",
                "operands need one shape, or one has the size 1 over all positions or channels",
            )
    return site.layer("mul", views)


def _is_factor(view, factor):
    """Whether `factor` has one value for each channel, or for each position."""
    shape, channels = list(view.wire.tensor.shape), view.wire.sizes.index("C")
    each_channel = [size if axis in (0, channels) else 1 for axis, size in enumerate(shape)]
    each_position = [1 if axis == channels else size for axis, size in enumerate(shape)]
    return list(factor.wire.tensor.shape) in (each_channel, each_position)


@handles(operator.truediv, operator.itruediv, torch.div, torch.true_divide, "div", "div_")
def _div(site, input, other):
    if isinstance(other, Constant):
        return _mul(site, input, _computed(other, other.tensor.reciprocal()))
    if not isinstance(other, (int, float)):
        site.fail(
            f"{site.operation} divides by a tensor computed from the input",
            "divide by numbers or weights; F.normalize divides by an L2 norm",
        )
    return _mul(site, input, 1 / other)


@handles("expand", "expand_as")
def _expand(site, input, *_):
    """What is repeated is only a factor: products repeat it by themselves."""
    products = {operator.mul, operator.imul, torch.mul, "mul", "mul_"}
    if any(user.target not in products for user in site.node.users):
        site.fail(
            f"{site.operation} repeats {site.view(input).wire.name} along an axis",
            "only factors of a product are repeated",
        )
    return site.view(input)


def _position_embed(site, tokens, positions):
    """tokens + parameter [1, T, C]; the parameter is fitted to other grids of patches."""
    view = site.plain(tokens, "NTC")
    if positions.tensor.numel() != math.prod(view.wire.tensor.shape[1:]):
        site.fail(
            f"{site.operation} adds a constant of shape {list(positions.tensor.shape)} to "
            f"{view.wire.name}",
            "positions are the same for every picture: [1, T, C]",
        )
    if positions.tensor.dim() == 2:  # the checkpoint has [T, C], the format wants [1, T, C]
        positions = Constant(positions.tensor.unsqueeze(0), positions.sources, positions.sized)
    patches, prefix = view.wire.patches, view.wire.prefix
    inputs = [view]
    if patches:
        height, width = patches.tensor.shape[2:]
        if height != width and math.isqrt(height * width) ** 2 == height * width:
            site.fail(
                f"positions of a grid of {height} x {width} would be read as a square grid",
                "train with a square grid, or with one whose count of patches has no whole root",
            )
        inputs.append(View(patches, _whole("NCHW")))
    else:
        prefix = 0
    return site.layer(
        "position_embed", inputs, {"prefix_tokens": prefix}, {"weight": positions},
        short="position_embed",
    )  # fmt: skip


@handles(torch.cat, getattr(torch, "concat", torch.cat))
def _concat(site, tensors, dim=0):
    parts = list(tensors)
    if len(parts) > 1 and isinstance(parts[-1], View):
        tokens = [part for part in parts[:-1] if isinstance(part, Constant)]
        if len(tokens) == len(parts) - 1:
            for token in reversed(tokens):
                parts[-1] = _class_token(site, token, parts[-1], dim)
            return parts[-1]
    views = site.same_form(parts)
    if views[0].axes[views[0].axis(dim)] != "C":
        site.fail(f"{site.operation} along axis {dim}", "only channels can be joined")
    if len(views) == 1:
        return views[0]
    return site.layer("concat", views)


def _class_token(site, token, tokens, dim):
    """cat([parameter [1, K, C] repeated for the batch, tokens], 1)."""
    view = site.plain(tokens, "NTC")
    tensor = torch.cat([token.tensor, view.wire.tensor], 1) if token.tensor.dim() == 3 else None
    same = bool((token.tensor == token.tensor[:1]).all())
    if view.axis(dim) != 1 or token.tensor.dim() != 3 or not same:
        site.fail(
            f"{site.operation} joins a constant of shape {list(token.tensor.shape)}",
            "a parameter [1, K, C] can be put before tokens, along axis 1",
        )
    first = Constant(token.tensor[:1], token.sources, token.sized)
    return site.layer(
        "class_token", [view], {}, {"weight": first},
        short="class_token", prefix=view.wire.prefix + token.tensor.shape[1], tensor=tensor,
    )  # fmt: skip


# ---------------------------------------------------------------------------------------------
# Handlers: pooling and means


@handles(F.max_pool2d, torch.max_pool2d)
def _max_pool(
    site, input, kernel_size, stride=None, padding=0, dilation=1, ceil_mode=False,
    return_indices=False,
):  # fmt: skip
    if return_indices:
        site.fail("max pooling that returns indices", "do without the indices")
    kernel = site.pair(kernel_size, "kernel_size")
    attributes = {
        "kernel_size": kernel,
        "stride": site.pair(stride, "stride") if stride not in (None, (), []) else kernel,
        "padding": site.sides(padding),
        "dilation": site.pair(dilation, "dilation"),
        "ceil_mode": bool(ceil_mode),
    }
    return site.layer("max_pool", [site.plain(input, "NCHW")], attributes, sizes="NCHW")


@handles(nn.MaxPool2d)
def _max_pool_module(site, m, input):
    return _max_pool(
        site, input, m.kernel_size, m.stride, m.padding, m.dilation, m.ceil_mode, m.return_indices
    )


@handles(F.avg_pool2d)
def _avg_pool(
    site, input, kernel_size, stride=None, padding=0, ceil_mode=False, count_include_pad=True,
    divisor_override=None,
):  # fmt: skip
    view = site.plain(input, "NCHW")
    if divisor_override is not None:
        site.fail("average pooling with a divisor of its own", "do without divisor_override")
    whole = isinstance(kernel_size, (tuple, list)) and all(isinstance(k, Size) for k in kernel_size)
    if whole and list(kernel_size) == list(view.wire.tensor.shape[2:]):
        return _adaptive_avg_pool(site, input, 1)
    kernel = site.pair(kernel_size, "kernel_size")
    attributes = {
        "kernel_size": kernel,
        "stride": site.pair(stride, "stride") if stride not in (None, (), []) else kernel,
        "padding": site.sides(padding),
        "ceil_mode": bool(ceil_mode),
        "count_padding": bool(count_include_pad),
    }
    return site.layer("avg_pool", [view], attributes, sizes="NCHW")


@handles(nn.AvgPool2d)
def _avg_pool_module(site, m, input):
    return _avg_pool(
        site, input, m.kernel_size, m.stride, m.padding, m.ceil_mode, m.count_include_pad,
        m.divisor_override,
    )  # fmt: skip


@handles(F.adaptive_avg_pool2d)
def _adaptive_avg_pool(site, input, output_size):
    sizes = output_size if isinstance(output_size, (tuple, list)) else [output_size]
    if None in sizes:
        site.fail("adaptive pooling that leaves a size alone", "give both sizes of the output")
    attributes = {"output_size": site.pair(output_size, "output_size")}
    return site.layer("adaptive_avg_pool", [site.plain(input, "NCHW")], attributes)


@handles(nn.AdaptiveAvgPool2d)
def _adaptive_avg_pool_module(site, m, input):
    return _adaptive_avg_pool(site, input, m.output_size)


@handles(nn.AdaptiveAvgPool1d)
def _adaptive_avg_pool_1d_module(site, m, input):
    if m.output_size not in (1, (1,)):
        site.fail("AdaptiveAvgPool1d to more than one value", "average over all positions")
    return _mean(site, input, -1, keepdim=True)


@handles(F.adaptive_max_pool2d)
def _adaptive_max_pool(site, input, output_size, return_indices=False):
    if return_indices:
        site.fail("max pooling that returns indices", "do without the indices")
    attributes = {"output_size": site.pair(output_size, "output_size")}
    return site.layer("adaptive_max_pool", [site.plain(input, "NCHW")], attributes, sizes="NCHW")


@handles(nn.AdaptiveMaxPool2d)
def _adaptive_max_pool_module(site, m, input):
    return _adaptive_max_pool(site, input, m.output_size, m.return_indices)


def _over_positions(site, view, dim):
    """The letters of a reduction over all positions and nothing else."""
    dims = [dim] if isinstance(dim, int) else list(dim or range(len(view.axes)))
    dims = {view.axis(d) for d in dims}
    reduced = {f.letter for d in dims for f in view.factors[d]}
    left = [axis for d, axis in enumerate(view.axes) if d not in dims and axis]
    if reduced != set(view.wire.sizes) - set("NC") or left != ["N", "C"] or not reduced:
        site.fail(
            f"{site.short_name()} over the axes {sorted(dims)} of {site.shown(view)}",
            "reduce over all positions (axes 2 and 3 of an image, axis 1 of tokens), or over the "
            "channels alone with keepdim=True",
        )
    return reduced


def _over_channels(site, view, dim, keepdim, kind):
    """The layer of a reduction over the channels alone; None when it is another."""
    dims = [view.axis(d) for d in ([dim] if isinstance(dim, int) else dim or ())]
    if view.wire.sizes == "NC" or [view.axes[d] for d in dims] != ["C"]:
        return None
    result = site.result
    if isinstance(site.value, tuple):  # values and indices
        result = site.value[0].detach().clone()
    if keepdim:
        factors = view.factors
    else:  # one channel beside another axis, where unsqueeze finds it
        factors = [list(axis) for axis in view.factors]
        (channel,) = factors.pop(dims[0])
        factors[dims[0] % len(factors)].insert(0, channel)
    return site.layer(
        "channel_pool", [view], {"kind": kind}, short=kind, size_of={"C": 1}, result=result,
        factors=tuple(map(tuple, factors)),
    )  # fmt: skip


@handles(torch.mean, "mean")
def _mean(site, input, dim=None, keepdim=False, *, dtype=None):
    view = site.settled(input)
    pooled = _over_channels(site, view, dim, keepdim, "mean")
    if pooled:
        return pooled
    averaged = _over_positions(site, view, dim)
    if not keepdim:
        return site.layer("mean", [view], {"keep": False}, sizes="NC", short="mean")
    fields = {"patches": None, "prefix": 0} if view.wire.sizes == "NTC" else {}
    return site.layer(
        "mean", [view], {"keep": True}, short="mean", size_of=dict.fromkeys(averaged, 1), **fields
    )


@handles(torch.max, "max")
def _max(site, input, dim=None, keepdim=False):
    """Values and indices along one axis; of all values, or of two tensors, is another function."""
    if not isinstance(dim, int):
        site.fail(f"{site.operation} without an axis", "name the axis: max(dim), or use amax")
    where = Refused("the places of the largest values are used", "use the values alone: amax(dim)")
    return _amax(site, input, dim, keepdim), where


@handles(torch.amax, "amax")
def _amax(site, input, dim=(), keepdim=False):
    view = site.settled(input)
    pooled = _over_channels(site, view, dim, keepdim, "max")
    if pooled:
        return pooled
    view = site.plain(view, "NCHW")
    _over_positions(site, view, dim)
    tensor = view.wire.tensor.amax((2, 3), keepdim=True)
    pooled = site.layer(
        "adaptive_max_pool", [view], {"output_size": [1, 1]}, tensor=tensor, short="amax"
    )
    return pooled if keepdim else site.see(pooled, _whole(("N", "CHW")))


# ---------------------------------------------------------------------------------------------
# Handlers: what changes the size of an image


@handles(F.pad, getattr(torch._C._nn, "pad", F.pad))
def _pad(site, input, pad, mode="constant", value=None):
    amounts = list(site.fixed(pad, "pad"))
    view = site.settled(input)
    by_axis = {}
    for place, axis in enumerate(reversed(view.axes)):
        before, after = (*amounts[2 * place : 2 * place + 2], 0, 0)[:2]
        by_axis[axis] = (before, after)
    top, left = (by_axis.pop(axis, (0, 0)) for axis in "HW")
    if view.wire.sizes != "NCHW" or any(amount != (0, 0) for amount in by_axis.values()):
        site.fail(f"{site.operation} of {site.shown(view)} by {amounts}", "pad images at the sides")
    if top == left == (0, 0):
        return view
    if min(*top, *left) < 0:
        site.fail("a padding that cuts off the sides", "crop images before the model")
    attributes = {"padding": [top[0], left[0], top[1], left[1]]}
    if value:
        attributes["value"] = float(value)
    if mode != "constant":
        attributes["mode"] = mode
    return site.layer("pad", [view], attributes)


@handles(nn.ZeroPad2d, nn.ConstantPad2d, nn.ReflectionPad2d, nn.ReplicationPad2d)
def _pad_module(site, m, input):
    modes = {nn.ReflectionPad2d: "reflect", nn.ReplicationPad2d: "replicate"}
    mode = next((word for kind, word in modes.items() if isinstance(m, kind)), "constant")
    return _pad(site, input, m.padding, mode, getattr(m, "value", None))


@handles(F.interpolate)
def _interpolate(
    site, input, size=None, scale_factor=None, mode="nearest", align_corners=None,
    recompute_scale_factor=None, antialias=False,
):  # fmt: skip
    factors = scale_factor if isinstance(scale_factor, (tuple, list)) else [scale_factor] * 2
    whole = size is None and all(f and float(f).is_integer() for f in factors)
    if not whole or mode not in ("nearest", "bilinear", "bicubic") or align_corners or antialias:
        site.fail(
            f"{site.operation} to size {size} by {scale_factor}, {mode}",
            "enlarge by whole factors: scale_factor=2, align_corners=False",
        )
    attributes = {"factor": [int(f) for f in factors], "interpolation": mode}
    return site.layer("resize", [site.plain(input, "NCHW")], attributes, sizes="NCHW")


@handles(nn.Upsample)
def _upsample_module(site, m, input):
    return _interpolate(site, input, m.size, m.scale_factor, m.mode, m.align_corners)


# ---------------------------------------------------------------------------------------------
# Handlers: shapes. Sizes need no reading: PyTorch's result says what came of them.


@handles(
    torch.flatten, torch.reshape, "flatten", "reshape", "reshape_as", "view", "view_as", "unflatten"
)
def _reshape(site, input, *_, **__):
    view = site.view(input)
    regrouped = _regrouped(view, site.result.shape)
    if regrouped is None:
        site.fail(
            f"{site.operation} from {view.sizes()} to {list(site.result.shape)} mixes axes of "
            f"{site.shown(view)}",
            "merge or split whole axes, and keep the pictures of a batch apart",
        )
    return site.see(regrouped, regrouped.factors)


@handles(nn.Flatten, nn.Unflatten)
def _flatten_module(site, m, input):
    return _reshape(site, input)


@handles(torch.permute, "permute")
def _permute(site, input, *dims):
    dims = dims[0] if isinstance(dims[0], (tuple, list)) else dims
    if isinstance(input, Scores):
        return dataclasses.replace(input, axes=tuple(input.axes[d] for d in dims))
    view = site.view(input)
    return site.see(view, [view.factors[view.axis(d)] for d in dims])


@handles(torch.transpose, torch.swapaxes, "transpose", "swapaxes", "swapdims")
def _transpose(site, input, dim0, dim1):
    count = len(_axes_of(site, input))
    order = list(range(count))
    order[dim0 % count], order[dim1 % count] = dim1 % count, dim0 % count
    return _permute(site, input, order)


def _axes_of(site, value):
    return value.axes if isinstance(value, Scores) else site.view(value).axes


@handles(torch.movedim, "movedim")
def _movedim(site, input, source, destination):
    view = site.view(input)
    order = [d for d in range(len(view.axes)) if d != view.axis(source)]
    order.insert(view.axis(destination), view.axis(source))
    return _permute(site, view, order)


@handles(getattr)
def _attribute(site, input, name):
    if name in ("mT", "T") and (name == "mT" or len(_axes_of(site, input)) == 2):
        return _transpose(site, input, -2, -1)
    return site.fail(f"the attribute {name!r} of a tensor", "use a function of torch instead")


@handles(torch.squeeze, "squeeze")
def _squeeze(site, input, dim=None):
    if dim is None:
        site.fail("squeeze of every axis of size 1", "name the axis: squeeze(dim)")
    return _reshape(site, input)


@handles(torch.unsqueeze, "unsqueeze")
def _unsqueeze(site, input, dim):
    view = site.view(input)
    place = dim % (len(view.axes) + 1)
    channel = _one_channel(view)  # reduced over, and now given its axis again
    factors = [tuple(f for f in axis if f is not channel) for axis in view.factors]
    factors.insert(place, (channel,) if channel else ())
    return site.see(view, factors)


def _one_channel(view):
    """The only channel of a view, where it shares another's axis."""
    for axis in view.factors:
        for f in axis if len(axis) > 1 else ():
            if f.letter == "C" and view.wire.size_of()["C"] == 1:
                return f
    return None


@handles(operator.getitem)
def _getitem(site, value, index):
    if isinstance(value, (tuple, list)):
        return value[index]
    view = site.view(value)
    parts = list(index) if isinstance(index, tuple) else [index]
    if any(part is Ellipsis for part in parts):
        place = next(i for i, part in enumerate(parts) if part is Ellipsis)
        kept = len(view.axes) - sum(part is not None for part in parts) + 1
        parts[place : place + 1] = [slice(None)] * kept
    for dim, part in reversed(list(enumerate(parts))):  # from the last: earlier places stay
        if part is None:
            below = sum(other is not None for other in parts[:dim])
            view = view.with_factors((*view.factors[:below], (), *view.factors[below:]), site=site)
    subsampled = _subsampled(site, view, parts)
    if subsampled:
        return subsampled
    place = 0
    for part in parts:
        if part is None:
            place += 1
        elif type(part) is int:
            view = _select(site, view, place, part)
        elif isinstance(part, slice):
            view = _sliced(site, view, place, part)
            place += 1
        else:
            site.fail(f"indexing of {site.shown(view)} by {part}", "index by numbers and slices")
    return view


def _subsampled(site, view, parts):
    """x[:, :, ::2, ::2] is pooling with windows of one pixel."""
    steps = {
        axis: part.step
        for axis, part in zip(view.axes, parts)
        if isinstance(part, slice) and (part.start, part.stop) == (None, None) and part.step
    }
    if not steps or set(steps) - {"H", "W"} or len(parts) != len(view.axes):
        return None
    if any(part != slice(None) for axis, part in zip(view.axes, parts) if axis not in steps):
        return None
    attributes = {"kernel_size": [1, 1], "stride": [steps.get("H", 1), steps.get("W", 1)]}
    return site.layer("max_pool", [site.settled(view)], attributes, short="subsample")


def _sliced(site, view, dim, part):
    if part == slice(None):
        return view
    axis, size = view.axes[dim], view.sizes()[dim]
    start, stop, step = part.start or 0, part.stop, part.step or 1
    site.fixed([start, step], "a slice")
    if (start, step) == (0, 1) and stop is not None and int(stop) == size:
        return view
    if step != 1 or axis not in ("C", "T"):
        site.fail(
            f"a slice {start}:{stop}:{step} along axis {dim} of {site.shown(view)}",
            "channels and tokens can be cut out; images are cropped before the model",
        )
    if axis == "C":
        start, stop, _ = part.indices(size)
        return _channels(site, view, dim, start, stop - start)
    view = site.plain(view, "NTC")
    count = 0 if stop is None else site.fixed(stop, "a slice")
    if start < 0 or count < 0:
        site.fail("tokens counted from the end", "count from the start: x[:, 1:]")
    patches, prefix = view.wire.patches, view.wire.prefix
    whole = patches is not None and start <= prefix and stop is None
    return site.layer(
        "slice", [view], {"axis": "tokens", "start": start, "count": count and count - start},
        short="slice", patches=patches if whole else None, prefix=prefix - start if whole else 0,
        tensor=view.wire.tensor[:, start : stop if stop is None else int(stop)].contiguous(),
    )  # fmt: skip


def _channels(site, view, dim, start, count):
    """A run of channels, axis `dim` of the view."""
    view = site.settled(view)
    if view.axes[dim] != "C":
        site.fail(
            f"channels {start} to {start + count} of {view.axes[dim]} of {site.shown(view)}",
            "cut all channels into equal parts, or cut before they are split into heads",
        )
    axis = view.wire.sizes.index("C")
    return site.layer(
        "slice", [view], {"start": start, "count": count}, short="slice",
        tensor=view.wire.tensor.narrow(axis, start, count).contiguous(),
    )  # fmt: skip


@handles(torch.select, "select")
def _select(site, input, dim, index):
    view = site.view(input)
    dim = view.axis(dim)
    axis, size = view.factors[dim], view.sizes()[dim]
    left = (*view.factors[:dim], *view.factors[dim + 1 :])
    if view.axes[dim] == "T" and view.wire.sizes == "NTC" and view.is_all():
        if [str(f) for rest in left for f in rest] != ["N", "C"]:
            site.fail(f"a token of {site.shown(view)}", "take tokens from [N, T, C]: x[:, index]")
        if index < 0:
            site.fail("a token counted from the end", "count from the start: x[:, index]")
        return site.layer(
            "select", [view], {"index": index}, sizes="NC", short="select",
            tensor=view.wire.tensor[:, index].contiguous(),
        )  # fmt: skip
    if size == 1 and dim > 0:  # nothing is left out
        merged = list(view.factors)
        merged[dim - 1 : dim + 1] = [(*view.factors[dim - 1], *axis)]
        return site.see(view, merged)
    if [f.letter for f in axis] != ["C"]:
        site.fail(
            f"a selection along axis {dim} of {site.shown(view)}",
            "one token can be taken out, x[:, index], or a group of channels",
        )
    chosen = (*view.chosen, (axis[0], index % size))
    return view.with_factors(left, chosen=chosen, site=site)


@handles(torch.unbind, "unbind")
def _unbind(site, input, dim=0):
    view = site.view(input)
    return tuple(_select(site, view, dim, i) for i in range(view.sizes()[view.axis(dim)]))


@handles(torch.chunk, torch.split, "chunk", "split", "split_with_sizes")
def _split(site, input, how, dim=0):
    """Runs along the channels. Equal ones stay part of the wire: attention reads them there."""
    view = site.view(input)
    dim = view.axis(dim)
    counts = [part.shape[dim] for part in site.value]
    axis = view.factors[dim]
    if [f.letter for f in axis] != ["C"]:
        site.fail(
            f"{site.operation} along axis {dim} of {site.shown(view)}", "split the channels only"
        )
    if len(counts) == 1:
        return (view,)
    if len(set(counts)) > 1:
        starts = [sum(counts[:i]) for i in range(len(counts))]
        return tuple(_channels(site, view, dim, s, n) for s, n in zip(starts, counts))
    shape = view.sizes()
    shape[dim : dim + 1] = [len(counts), counts[0]]
    parts = _regrouped(view, shape)
    return tuple(_select(site, parts, dim, i) for i in range(len(counts)))


# ---------------------------------------------------------------------------------------------
# Handlers: what does nothing at inference


@handles("contiguous", "clone", "detach", "float", "to", "type_as", "requires_grad_", torch.clone)
def _vanish(site, input, *_, **__):
    return input


@handles(
    nn.Identity,
    nn.Dropout,
    nn.Dropout1d,
    nn.Dropout2d,
    nn.AlphaDropout,
    "torchvision.ops.stochastic_depth.StochasticDepth",
)
def _identity_module(site, m, input):
    return _identity(site, input)


@handles(F.dropout, F.dropout2d, F.alpha_dropout)
def _dropout(site, input, p=0.5, training=True, inplace=False):
    if training and p > 0:
        site.fail(
            f"{site.operation} drops values at inference too",
            "pass training=self.training",
        )
    return _identity(site, input)


def _identity(site, input):
    """Layers stay, so that they can be looked at; parts of a wire are none yet."""
    if isinstance(input, Scores) or (isinstance(input, View) and not input.is_all()):
        return input
    return site.layer("identity", [site.view(input)])


# ---------------------------------------------------------------------------------------------
# Handlers: attention


@handles(nn.MultiheadAttention)
def _multihead_attention(
    site, m, query, key, value, key_padding_mask=None, need_weights=True, attn_mask=None,
    average_attn_weights=True, is_causal=False,
):  # fmt: skip
    """Three layers: <path>.in_proj, <path>.attention, <path>.out_proj.

    Queries, keys and values of different tensors, or weights that are stored apart, have a
    projection each (<path>.q_proj, .k_proj, .v_proj) in place of in_proj.
    """
    if key_padding_mask is not None or attn_mask is not None or is_causal:
        site.fail("attention with a mask", "the attention operator has no mask")
    if m.bias_k is not None or m.add_zero_attn:
        site.fail("attention with extra keys", "leave add_bias_kv and add_zero_attn out")
    views = [site.settled(v) for v in (query, key, value)]
    axes = ("N", "T", "C") if m.batch_first else ("T", "N", "C")
    for view in views:
        if view.wire.sizes != "NTC" or view.axes != axes:
            site.fail(
                f"attention with batch_first={m.batch_first} gets {site.shown(view)}",
                "pass tokens [N, T, C] to attention with batch_first=True, or transposed without",
            )
    tokens = [View(view.wire, _whole("NTC")) for view in views]
    path, heads = site.node.target, m.num_heads

    def project(name, view, weight, bias):
        result = F.linear(view.wire.tensor, weight, bias)
        weights = {"weight": weight, "bias": bias}
        return site.layer("linear", [view], {}, weights, name=f"{path}.{name}", tensor=result)

    shared = all(view.wire is views[0].wire for view in views)
    if shared and m._qkv_same_embed_dim:
        sources = [project("in_proj", tokens[0], m.in_proj_weight, m.in_proj_bias)]
        q, k, v = sources[0].wire.tensor.chunk(3, dim=-1)
    else:
        stored = (m.q_proj_weight, m.k_proj_weight, m.v_proj_weight)
        # Slices become tensors of their own: the checkpoint has only the joint ones.
        weights = m.in_proj_weight.chunk(3) if m._qkv_same_embed_dim else stored
        biases = m.in_proj_bias.chunk(3) if m.in_proj_bias is not None else (None,) * 3
        names = ("q_proj", "k_proj", "v_proj")
        sources = [project(*parts) for parts in zip(names, tokens, weights, biases)]
        q, k, v = (source.wire.tensor for source in sources)

    mixed, scores = _attend(q, k, v, heads)
    core = site.layer(
        "attention", sources, {"heads": heads}, name=f"{path}.attention", tensor=mixed
    )
    weight, bias = m.out_proj.weight, m.out_proj.bias
    seen = site.value[0].detach().clone()
    result = seen if m.batch_first else seen.transpose(0, 1).contiguous()
    _require_close(F.linear(mixed, weight, bias), result, site, "attention taken to pieces")
    out = site.layer(
        "linear", [core], {}, {"weight": weight, "bias": bias},
        name=f"{path}.out_proj", tensor=result,
    )  # fmt: skip
    if not need_weights or average_attn_weights:
        second = Refused(
            f"the attention weights of {path}, averaged over its heads, are used",
            "use the attention of each head: need_weights=True, average_attn_weights=False",
        )
    else:
        second = site.layer(
            "attention_weights", sources[:2], {"heads": heads},
            name=f"{path}.attention_weights", sizes="NhTS", tensor=scores,
        )  # fmt: skip
    return View(out.wire, _whole(axes), site=site), second


def _attend(q, k, v, heads):
    """softmax(q k^T / sqrt(d)) v by head (Vaswani et al. 2017), and the softmax itself."""
    q, k, v = (t.unflatten(-1, (heads, -1)).transpose(1, 2) for t in (q, k, v))
    scores = torch.softmax(q @ k.transpose(-2, -1) / math.sqrt(q.shape[-1]), dim=-1)
    return (scores @ v).transpose(1, 2).flatten(2).contiguous(), scores


def _require_close(ours, theirs, site, what):
    # Far more than two orders of summing differ, far less than a wrong scale or swapped heads do.
    limit = min(1000 * torch.finfo(theirs.dtype).eps, 0.05)
    error = (ours.double() - theirs.double()).norm() / theirs.double().norm().clamp_min(1e-30)
    if not error <= limit:
        site.fail(
            f"{what} differs from the module's own output by {float(error):.2g}",
            "this module does more than the standard one; replace it by plain modules",
        )


# ---------------------------------------------------------------------------------------------
# Handlers: attention written out, softmax(q k^T) v
#
# Products are read through labels of axes, as in Einstein's summation convention. The first gives
# `Scores`; scaling, biases and the softmax are kept there; the second product makes it a layer.


@handles(operator.matmul, torch.matmul, torch.bmm, "matmul", "bmm", "__matmul__")
def _matmul(site, input, other):
    if isinstance(other, Constant) and other.tensor.dim() == 2 and isinstance(input, View):
        return _linear(site, input, _computed(other, other.tensor.t().contiguous()))
    ranks = [len(_axes_of(site, value)) for value in (input, other)]
    if ranks[0] != ranks[1]:
        site.fail("a product of tensors of other ranks", "give both the same axes")
    batch = "abcdefgh"[: ranks[0] - 2]
    return _contract(site, input, other, batch + "ik", batch + "kj", batch + "ij")


@handles(torch.einsum)
def _einsum(site, equation, *operands):
    if len(operands) == 1 and isinstance(operands[0], (tuple, list)):
        operands = operands[0]
    inputs, _, output = equation.replace(" ", "").partition("->")
    labels = inputs.split(",")
    if len(operands) != 2 or len(labels) != 2 or "." in equation or not output:
        site.fail(f"einsum {equation!r}", "name two operands, every axis and the output")
    return _contract(site, *operands, *labels, output)


@handles(getattr(F, "scaled_dot_product_attention", "torch.nn.functional.sdpa_"))
def _scaled_dot_product_attention(
    site, query, key, value, attn_mask=None, dropout_p=0.0, is_causal=False, scale=None,
    enable_gqa=False,
):  # fmt: skip
    if is_causal or enable_gqa:
        site.fail("attention that is causal or shares keys", "the attention operator has neither")
    depth = site.view(query).sizes()[-1]
    batch = "abcdefgh"[: len(site.view(query).axes) - 2]
    scores = _contract(site, query, key, batch + "ik", batch + "jk", batch + "ij")
    scores = _scores_scaled(site, scores, depth**-0.5 if scale is None else scale)
    if attn_mask is not None:
        scores = _scores_bias(site, scores, attn_mask)
    scores = dataclasses.replace(scores, weighted=True)
    return _contract(site, scores, value, batch + "ij", batch + "jk", batch + "ik")


def _contract(site, first, second, labels, other_labels, output):
    if isinstance(second, Scores):
        first, second, labels, other_labels = second, first, other_labels, labels
    summed = [label for label in labels if label in other_labels and label not in output]
    own = [
        [x for x in labels if x not in other_labels],
        [x for x in other_labels if x not in labels],
    ]
    strange = set(output) - set(labels + other_labels)
    if len(summed) != 1 or any(len(x) != 1 for x in own) or strange:
        site.fail(
            f"the product {labels}, {other_labels} -> {output}",
            "products are matrix products over pictures and heads",
        )
    if isinstance(first, Scores):
        return _mix(site, first, second, labels, other_labels, output, summed[0])
    query, key = site.view(first), site.view(second)
    if query.wire.sizes != key.wire.sizes:
        query, key = (_as_tokens(site, view) for view in (query, key))
    by_label = dict(zip(labels, query.factors)), dict(zip(other_labels, key.factors))
    depth = by_label[0][summed[0]]
    if [f.letter for f in depth + by_label[1][summed[0]]] != ["C", "C"]:
        site.fail(
            f"the product of {site.shown(query)} and {site.shown(key)}",
            "products of two computed tensors are those of attention: over the channels of heads",
        )
    kinds = {own[0][0]: "query", own[1][0]: "key"}
    axes = tuple(
        (kinds.get(x, "batch"), by_label[0][x] if x in by_label[0] else by_label[1][x])
        for x in output
    )
    batch = [[by_label[i][x] for x in output if x not in kinds] for i in (0, 1)]
    if list(map(_without_heads, batch[0])) != list(map(_without_heads, batch[1])):
        site.fail(
            f"the product of {site.shown(query)} and {site.shown(key)}, whose axes differ",
            "queries and keys need the same pictures, windows and heads",
        )
    return Scores(query, key, depth[0], axes, query.scaled * key.scaled)


def _without_heads(axis):
    """The factors of an axis with heads known by their count: q, k and v may lie elsewhere."""
    return tuple(f.parts[f.index] if f.letter == "C" else f for f in axis)


def _weighted(site, scores, dim):
    """The softmax says which of the two are the keys."""
    if dim is None or scores.weighted or scores.axes[dim][0] == "batch":
        site.fail(f"softmax of attention's scores along axis {dim}", "take it over the keys, once")
    if scores.axes[dim][0] == "key":
        return dataclasses.replace(scores, weighted=True)
    turned = {"query": "key", "key": "query", "batch": "batch"}
    axes = tuple((turned[kind], axis) for kind, axis in scores.axes)
    return dataclasses.replace(
        scores, query=scores.key, key=scores.query, axes=axes, weighted=True
    )


def _scores_scaled(site, scores, factor):
    if scores.weighted or scores.bias:
        site.fail("attention scores multiplied after the bias or the softmax", "scale q k^T only")
    if isinstance(factor, Constant):
        heads = _heads_of(scores)
        if factor.tensor.numel() != (heads.parts[heads.index] if heads else 1):
            site.fail(
                f"attention scores multiplied by a constant of shape {list(factor.tensor.shape)}",
                "multiply by a number, or by one for each head",
            )
        return dataclasses.replace(scores, head_scale=factor)
    if not isinstance(factor, (int, float)):
        site.fail("attention scores multiplied by a tensor", "multiply by a number")
    return dataclasses.replace(scores, scale=scores.scale * float(factor))


def _scores_bias(site, scores, bias):
    if isinstance(bias, (int, float)) and bias == 0:
        return scores
    if not isinstance(bias, Constant) or not bias.tensor.is_floating_point() or scores.weighted:
        site.fail(
            "attention scores with a mask or a bias that depends on the input",
            "add a weight of shape [heads, T, S]",
        )
    if scores.bias:
        names = (*scores.bias.sources, *bias.sources)
        bias = Constant(scores.bias.tensor + bias.tensor, names, scores.bias.sized or bias.sized)
    return dataclasses.replace(scores, bias=bias)


def _heads_of(scores):
    """The factor of the channels that counts heads; None of a single head."""
    heads = [f for kind, axis in scores.axes if kind == "batch" for f in axis if f.letter == "C"]
    return heads[0] if heads else None


def _mix(site, scores, values, labels, other_labels, output, summed):
    """The second product: a layer `attention` of tokens, `window_attention` of images."""
    v = site.view(values)
    rows = next(axis for kind, axis in scores.axes if kind == "query")
    whole = [str(f) for f in rows] == ["H", "W"] and scores.bias is None
    if (whole and not scores.query.normalized) or v.wire.sizes != scores.query.wire.sizes:
        scores, v = _scores_as_tokens(site, scores), _as_tokens(site, v)
        rows = next(axis for kind, axis in scores.axes if kind == "query")
    of_scores, of_values = dict(zip(labels, scores.axes)), dict(zip(other_labels, v.factors))
    batch = [x for x in output if x in labels and x in other_labels]
    if (
        not scores.weighted
        or of_scores[summed][0] != "key"
        or of_values[summed] != of_scores[summed][1]
        or any(_without_heads(of_scores[x][1]) != _without_heads(of_values[x]) for x in batch)
        or v.scaled != 1.0
        or v.normalized
    ):
        site.fail(
            f"the product of attention's scores and {site.shown(v)}",
            "write softmax(q @ k.transpose(-2, -1) * scale, -1) @ v with keys and values alike",
        )
    heads, depth = _heads_of(scores), of_values[[x for x in other_labels if x not in labels][0]]
    count = heads.parts[heads.index] if heads else 1
    depths = [view.sizes()[view.factors.index(axis)] for view, axis in
              ((scores.query, (scores.depth,)), (v, depth))]  # fmt: skip
    if depths[0] != depths[1]:
        site.fail(
            f"attention whose values have {depths[1]} channels a head and whose keys have "
            f"{depths[0]}",
            "give keys and values the same number of channels",
        )
    parts = (count, depths[0])

    def in_output(axis):
        return tuple(Factor("C", parts, 0) if f.letter == "C" else f for f in axis)

    channel = (Factor("C", parts, 1) if count > 1 else Factor("C"),)
    factors = tuple(in_output(of_scores[x][1]) if x in of_scores else channel for x in output)
    attributes = {"heads": count}
    if scores.query.normalized and scores.key.normalized:
        attributes["cosine"] = True
    elif not math.isclose(scores.scale, depths[0] ** -0.5, rel_tol=1e-6):
        attributes["scale"] = scores.scale
    sources = _attention_sources(site, scores.query, scores.key, v, count)
    if scores.query.wire.sizes == "NCHW":
        return _mix_windows(site, scores, sources, rows, attributes, factors)
    if [str(f) for f in rows] != ["T"] or attributes.get("cosine") or scores.head_scale:
        site.fail(
            f"attention within parts of {scores.query.wire.name}",
            "attend to all tokens, or arrange them as an image first",
        )
    weights = {"position_bias": _token_bias(site, scores)} if scores.bias else {}
    return site.layer(
        "attention", sources, attributes, weights, factors=factors, short="attention"
    )


def _attention_sources(site, query, key, value, heads):
    """Views of the wires that hold q, k and v: one when they lie side by side in it."""
    views = [query, key, value]
    taken = [view.chosen[0] if len(view.chosen) == 1 else (None, 0) for view in views]
    first = taken[0][0]
    joint = first and first.letter == "C" and first.index == 0 and first.parts[0] == 3
    if joint and taken == [(first, i) for i in range(3)]:
        if all(view.wire is query.wire for view in views):
            return [View(query.wire, _whole(query.wire.sizes))]
    views = [site.settled(dataclasses.replace(v, scaled=1.0, normalized=0.0)) for v in views]
    for view in views:
        channels = [f for axis in view.factors for f in axis if f.letter == "C"]
        channels.sort(key=lambda f: f.index)
        outer = [f.parts[f.index] for f in channels[:-1] if f.parts]
        if outer != ([heads] if heads > 1 else []):
            site.fail(
                f"attention over channels of {site.shown(view)}",
                "arrange channels as [q, k, v, each of heads x depth]: "
                "reshape(batch, tokens, 3, heads, depth)",
            )
    return [View(view.wire, _whole(view.wire.sizes)) for view in views]


def _token_bias(site, scores):
    """[1 or heads, T, S] of what was added to the scores."""
    bias = scores.bias.tensor
    while bias.dim() > 3 and bias.shape[0] == 1:
        bias = bias[0]
    bias = bias.unsqueeze(0) if bias.dim() == 2 else bias
    kinds = [kind for kind, _ in scores.axes[-2:]]
    if bias.dim() != 3 or kinds != ["query", "key"]:
        site.fail(
            f"a bias of shape {list(scores.bias.tensor.shape)} on attention's scores",
            "add a bias of shape [heads, T, S]",
        )
    if bias.shape == scores.bias.tensor.shape:
        return scores.bias
    return _computed(scores.bias, bias.contiguous())


def _mix_windows(site, scores, sources, rows, attributes, factors):
    """Attention within windows of an image, or on grids spread over it."""
    wire = scores.query.wire
    names = [str(f) for f in rows]
    if names not in (["H1", "W1"], ["H0", "W0"], ["H", "W"]):
        site.fail(
            f"attention along {names} of {site.shown(scores.query)}",
            "windows cut both height and width into parts",
        )
    if names == ["H0", "W0"]:
        attributes["arrangement"] = "grid"
    known = wire.size_of()
    attributes["window"] = [f.size(known) for f in rows]
    if any(f.parts and len(f.parts) != 2 for f in rows):
        site.fail(f"attention within windows of windows of {wire.name}", "cut the image once")
    if len(sources) > 1:
        sources = [_joint(site, sources)]
    weights = {"position_bias": _relative_table(site, scores.bias, attributes["window"])}
    return site.layer(
        "window_attention", sources, attributes, {**weights, **_head_scale(site, scores)},
        sizes="NCHW", factors=factors, short="attention",
    )  # fmt: skip


def _joint(site, sources):
    tensor = torch.cat([source.wire.tensor for source in sources], 1)
    return site.layer("concat", sources, sizes="NCHW", short="concat", tensor=tensor)


def _as_tokens(site, view):
    """A view of an image with its positions in one axis, as one of tokens."""
    if view.wire.sizes != "NCHW":
        return view
    key = (view.wire.name, "tokens")
    if key not in site.builder.cut:
        site.builder.cut[key] = site.layer(
            "image_to_tokens", [View(view.wire, _whole("NCHW"))], sizes="NTC",
            short="image_to_tokens", patches=view.wire,
            tensor=view.wire.tensor.flatten(2).transpose(1, 2).contiguous(),
        ).wire  # fmt: skip
    return dataclasses.replace(
        view, wire=site.builder.cut[key], factors=tuple(map(_tokens_axis, view.factors))
    )


def _tokens_axis(axis):
    return (Factor("T"),) if [str(f) for f in axis] == ["H", "W"] else axis


def _scores_as_tokens(site, scores):
    return dataclasses.replace(
        scores, query=_as_tokens(site, scores.query), key=_as_tokens(site, scores.key),
        axes=tuple((kind, _tokens_axis(axis)) for kind, axis in scores.axes),
    )  # fmt: skip


def _head_scale(site, scores):
    if scores.head_scale is None:
        return {}
    scale = scores.head_scale.tensor.flatten() * scores.scale
    return {"head_scale": _computed(scores.head_scale, scale)}


def _relative_table(site, bias, window):
    """[(2h-1)(2w-1), heads]: what a bias [.., heads, T, T] says for each offset of a key."""
    if bias is None:
        return None
    height, width = window
    tensor = bias.tensor.detach()
    while tensor.dim() > 3 and tensor.shape[0] == 1:
        tensor = tensor[0]
    if tensor.dim() != 3 or list(tensor.shape[1:]) != [height * width] * 2:
        site.fail(
            f"a bias of shape {list(bias.tensor.shape)} for windows of {height} x {width}",
            "add a bias of shape [heads, T, T], T the positions of a window",
        )
    y, x = (t.flatten() for t in torch.meshgrid(
        torch.arange(height), torch.arange(width), indexing="ij"))  # fmt: skip
    rows = y[:, None] - y[None, :] + height - 1
    offsets = rows * (2 * width - 1) + x[:, None] - x[None, :] + width - 1
    table = torch.zeros((2 * height - 1) * (2 * width - 1), tensor.shape[0], dtype=tensor.dtype)
    table[offsets.flatten()] = tensor.permute(1, 2, 0).reshape(-1, tensor.shape[0])
    if not torch.equal(table[offsets].permute(2, 0, 1), tensor):
        site.fail(
            "a bias that depends on more than the offset of key and query in their window",
            "use relative positions, as Liu et al. 2021 do",
        )
    return _computed(bias, table)


# ---------------------------------------------------------------------------------------------
# Handlers: published building blocks that come as one function


@handles("torchvision.models.swin_transformer.shifted_window_attention")
def _shifted_window_attention(
    site, input, qkv_weight, proj_weight, relative_position_bias, window_size, num_heads,
    shift_size, attention_dropout=0.0, dropout=0.0, qkv_bias=None, proj_bias=None,
    logit_scale=None, training=False,
):  # fmt: skip
    """Liu et al. 2021, and 2022 with `logit_scale`: linear, window_attention, linear."""
    view = site.settled(input)
    if view.axes != ("N", "H", "W", "C"):
        site.fail(f"windows of {site.shown(view)}", "pass images as [N, H, W, C]")
    heads, path = num_heads, site.origin.path
    weights = {"position_bias": _relative_table(site, relative_position_bias, window_size)}
    attributes = {"heads": heads, "window": list(window_size), "shift": list(shift_size)}
    x, bias = view.tensor(), qkv_bias
    if logit_scale is not None:
        attributes["cosine"] = True
        scale = torch.clamp(logit_scale.tensor.detach(), max=math.log(100.0)).exp()
        weights["head_scale"] = _computed(logit_scale, scale.flatten())
        if bias is not None:  # keys have none: their part is set to 0 in every call
            zeroed = bias.tensor.detach().clone()
            zeroed.view(3, -1)[1] = 0
            bias = bias if torch.equal(zeroed, bias.tensor) else _computed(bias, zeroed)
    if bias is not None:
        weights["padding"] = bias
    joint = site.layer(
        "linear", [view], {}, {"weight": qkv_weight, "bias": bias}, name=f"{path}.qkv",
        result=F.linear(x, qkv_weight.tensor, None if bias is None else bias.tensor),
    )  # fmt: skip
    unprojected = site.node.target(
        x, qkv_weight.tensor, torch.eye(x.shape[-1]), relative_position_bias.tensor,
        list(window_size), heads, shift_size=list(shift_size),
        qkv_bias=None if bias is None else bias.tensor,
        logit_scale=None if logit_scale is None else logit_scale.tensor,
    )  # fmt: skip
    mixed = site.layer(
        "window_attention", [joint], attributes, weights, name=f"{path}.attention",
        result=unprojected,
    )  # fmt: skip
    return site.layer(
        "linear", [mixed], {}, {"weight": proj_weight, "bias": proj_bias}, name=f"{path}.proj"
    )


@handles("torchvision.models.swin_transformer._patch_merging_pad")
def _patch_merging(site, input):
    view = site.settled(input)
    return site.layer("space_to_depth", [view], {"block": [2, 2]}, short="patches")


# ---------------------------------------------------------------------------------------------
# Export


def export(
    module,
    example_input,
    folder,
    labels=None,
    preprocess=None,
    reference=True,
    name=None,
    picture=None,
):
    """Writes `module` as a bundle into `folder` (made if it is not there).

    module          any nn.Module; it is run in eval mode and left as it was
    example_input   a tensor [N, C, H, W] (or [N, T, C], [N, C]), or a tuple of several, for the
                    first parameters of forward; others keep their defaults. None with a picture
    labels          optional class names, written to labels.txt
    preprocess      optional dict, see GRAPH_FORMAT.md
    reference       whether to write every layer's output for the example
    name            the graph's name; the folder's when None
    picture         optional path (needs Pillow): the example is what `preprocess` makes of this
                    picture, and the reference holds the stages of that, so that
                    `leadsman verify --image` compares the whole way from the file

    Returns {"layers": count, "parameters": count, "unused": names of the checkpoint's tensors that
    the graph does not need, "computed": names of weights computed from the checkpoint's}. Raises
    ExportError for what cannot be exported; nothing is written then.
    """
    stages, made_by = {}, {}
    if picture is not None:
        if example_input is not None or preprocess is None:
            raise ValueError("a picture goes with preprocess, and takes the place of example_input")
        example_input, stages, made_by = _preprocessed(picture, preprocess)
    inputs = tuple(example_input) if isinstance(example_input, (tuple, list)) else (example_input,)
    with torch.no_grad(), _in_eval_mode(module):
        expected = _tensors_of(module(*(tensor.clone() for tensor in inputs)))
        graph, tracer = _trace(module, inputs)
        builder = Builder(module, graph, tracer)
        builder.build()
    _check(builder, expected)
    labels = _checked_labels(labels, expected)

    document = {"leadsman_graph": FORMAT_VERSION}
    document["name"] = name or os.path.basename(os.path.abspath(folder))
    outputs = list(dict.fromkeys(builder.outputs))  # one that is returned twice is one
    document.update(inputs=builder.inputs, outputs=outputs, layers=builder.layers)
    if preprocess is not None:
        document["preprocess"] = preprocess
    graph_text = _graph_text(document)

    os.makedirs(folder, exist_ok=True)
    stale = os.path.join(folder, "reference.safetensors")
    with contextlib.suppress(FileNotFoundError):  # never one of other weights
        os.remove(stale)
    write_safetensors(os.path.join(folder, "weights.safetensors"), builder.weights)
    if labels is not None:
        _write_text(os.path.join(folder, "labels.txt"), "".join(f"{label}\n" for label in labels))
    _write_text(os.path.join(folder, "graph.json"), graph_text)
    if reference:
        tensors = {name: tensor.float() for name, tensor in builder.reference.items()}
        metadata = {"library": "torch", "version": str(torch.__version__), **made_by}
        write_safetensors(stale, {**tensors, **stages}, metadata)
    buffers = {name for name, _ in module.named_buffers()}
    return {
        "layers": len(builder.layers),
        "parameters": sum(
            tensor.numel() for name, tensor in builder.weights.items() if name not in buffers
        ),
        "unused": [
            name
            for name, tensor in builder.checkpoint.items()
            if name not in builder.weights and tensor.is_floating_point()
        ],
        "computed": [name for name in builder.weights if name not in builder.checkpoint],
    }


@contextlib.contextmanager
def _in_eval_mode(module):
    training = {m: m.training for m in module.modules()}
    module.eval()
    try:
        yield
    finally:
        for m, flag in training.items():
            m.training = flag


def _tensors_of(output):
    tensors = []
    fx.node.map_aggregate(output, lambda leaf: tensors.append(leaf))
    return [tensor for tensor in tensors if isinstance(tensor, torch.Tensor)]


def _agree(tensor, expected):
    """Whether the same operations gave both; threads may have summed in another order."""
    tensor, expected = tensor.double(), expected.double()
    if tensor.shape != expected.shape:
        return False
    atol = 1e-4 * float(expected.abs().max()) if expected.numel() else 0
    return torch.allclose(tensor, expected, rtol=1e-3, atol=atol)


def _check(builder, expected):
    """The graph against its own rules, and against what the module itself returned."""
    origin = Origin("", type(builder.module).__name__)
    known = [entry["name"] for entry in builder.inputs]
    for layer in builder.layers:
        missing = [name for name in layer["inputs"] if name not in known]
        if missing or layer["name"] in known or ":" in layer["name"]:
            raise ExportError(f"the layer {layer} does not follow those before it", origin)
        known.append(layer["name"])
    if len(expected) != len(builder.outputs):
        raise ExportError(
            f"the model returns {len(expected)} tensors, its trace {len(builder.outputs)}",
            origin,
            _SAME_FOR_EVERY_PICTURE,
        )
    for name, tensor in zip(builder.outputs, expected):
        if not _agree(builder.reference[name], tensor):
            raise ExportError(
                f"the traced output {name} differs from what the model itself returns",
                origin,
                "look for randomness, for state that changes from call to call, or for hooks",
            )


def _checked_labels(labels, expected):
    if labels is None:
        return None
    labels = [str(label) for label in labels]
    if any("\n" in label or "\r" in label for label in labels):
        raise ValueError("a label holds a line break")
    if expected[0].dim() == 2 and expected[0].shape[1] != len(labels):
        raise ValueError(f"{len(labels)} labels for {expected[0].shape[1]} classes")
    return labels


# ---------------------------------------------------------------------------------------------
# Untrained models with weights worth comparing


def vary_constant_parameters(module, seed=0):
    """Gives every parameter whose values are all equal seeded values around that one.

    Fresh modules have gains of 1, biases, class tokens and whole classifiers of 0: a mistake in
    applying them would not show. Layer scales start near 0 (Touvron et al. 2021), which hides the
    layers behind them; they get values around 0.5, as training might give them.
    """
    generator = torch.Generator().manual_seed(seed)
    with torch.no_grad():
        for parameter in module.parameters():
            if parameter.numel() == 0 or not bool((parameter == parameter.flatten()[0]).all()):
                continue
            value = float(parameter.flatten()[0])
            value = 0.5 if 0 < abs(value) < 1e-2 else value
            noise = torch.randn(parameter.shape, generator=generator).to(parameter.dtype)
            fan_in = parameter[0].numel() if parameter.dim() == 2 else 100
            spread = 0.1 * abs(value) if value else 1 / math.sqrt(fan_in)
            parameter.copy_(value + spread * noise)


def calm_down(module):
    """Keeps networks of random weights from blowing up every rounding, by factors of thousands in
    deep ones, which those of training do not.

    The last gain of the residual branches of torchvision's blocks becomes 0, as they are trained
    (Goyal et al. 2017). Batch normalisation and ReLU without residuals are chaotic as well (Yang et
    al. 2019, "A mean field theory of batch normalization"): there the shifts become 0.5, so that
    more values are on the linear side.
    """
    always = ("BasicBlock", "Bottleneck", "ResBottleneckBlock")
    residuals = False
    for block in module.modules():
        residual = getattr(block, "use_res_connect", getattr(block, "apply_residual", None))
        if not (type(block).__name__ in always if residual is None else residual):
            continue
        shortcut = getattr(block, "downsample", None) or getattr(block, "proj", None)
        skipped = set(shortcut.modules()) if shortcut is not None else set()
        norms = [m for m in block.modules() if isinstance(m, nn.BatchNorm2d) and m not in skipped]
        if norms:
            nn.init.zeros_(norms[-1].weight)
            residuals = True
    for m in module.modules():
        if isinstance(m, nn.BatchNorm2d) and not residuals and m.bias is not None:
            nn.init.constant_(m.bias, 0.5)


def settle_batch_norm(module, inputs):
    """Sets the running statistics of every batch normalisation to those of `inputs`.

    inputs: a tensor, or an iterable of tensors, of two pictures or more each. Only the batch
    normalisations run in training mode; each batch counts the same.
    """
    norms = [m for m in module.modules() if isinstance(m, nn.modules.batchnorm._BatchNorm)]
    if not norms:
        return
    momenta = {m: m.momentum for m in norms}
    with torch.no_grad(), _in_eval_mode(module):
        for m in norms:
            m.reset_running_stats()
            m.momentum = None  # a plain average
            m.train()
        try:
            for batch in [inputs] if isinstance(inputs, torch.Tensor) else inputs:
                module(batch)
        finally:
            for m, momentum in momenta.items():
                m.momentum = momentum


def picture_like(count, height, width, channels=3, seed=0):
    """Seeded [count, channels, height, width]: blotches of every size, each picture its own mix.

    White noise is a poor stand-in for pictures: to a deep network all noise looks alike, and batch
    statistics taken from it would blow up what little differs.
    """
    generator = torch.Generator().manual_seed(seed)
    pictures = torch.zeros(count, channels, height, width)
    side = 2
    while side < max(height, width):
        strength = torch.rand(count, 1, 1, 1, generator=generator)
        blotches = torch.randn(count, channels, side, side, generator=generator)
        pictures += strength * F.interpolate(
            blotches, size=(height, width), mode="bilinear", align_corners=False
        )
        side = side * 5 // 2
    return pictures


# ---------------------------------------------------------------------------------------------
# A picture as the example


def _preprocessed(path, preprocess):
    """(input [1, C, h, w], {"preprocess:decoded": levels [1, 3, h, w], ...}, metadata)

    The steps are Pillow's, the sizes and the order of operations those of torchvision's Resize,
    CenterCrop, ToTensor and Normalize.
    """
    try:
        import PIL
        from PIL import Image, ImageOps
    except ImportError as error:
        raise ImportError("to read a picture, the exporter needs the package Pillow") from error

    with Image.open(path) as file:
        image = file if preprocess.get("orientation") != "exif" else ImageOps.exif_transpose(file)
        image = image.convert("RGB")
    stages = {"decoded": image}
    if "resize" in preprocess:
        kernel = preprocess["resize"].get("interpolation", "bilinear")
        if kernel not in ("nearest", "bilinear", "bicubic"):
            raise ValueError(f"the interpolation {kernel!r} is not nearest, bilinear or bicubic")
        height, width = _resized_size(preprocess["resize"], image.height, image.width)
        image = image.resize((width, height), getattr(Image, kernel.upper()))
    stages["resized"] = image
    if "crop" in preprocess:
        height, width = preprocess["crop"]
        top, left = _crop_begin(image.height, height), _crop_begin(image.width, width)
        image = image.crop((left, top, left + width, top + height))  # black beyond the picture
    stages["cropped"] = image

    channels = preprocess.get("channels", "RGB")
    levels = _levels(image.convert("L") if channels == "GREY" else image)
    levels = levels.flip(1) if channels == "BGR" else levels
    count = levels.shape[1]
    mean, std = (
        torch.tensor(preprocess.get(key, [default] * count), dtype=torch.float).view(1, count, 1, 1)
        for key, default in (("mean", 0.0), ("std", 1.0))
    )
    example = ((levels.double() * preprocess.get("scale", 1 / 255)).float() - mean) / std
    return (
        example,
        {f"preprocess:{stage}": _levels(image) for stage, image in stages.items()},
        {"picture": os.path.basename(path), "pillow": PIL.__version__},
    )


def _resized_size(resize, height, width):
    if "exact" in resize:
        return resize["exact"]
    side = resize["shorter_side"]
    longer = int(side * max(height, width) / min(height, width))
    return (side, longer) if height <= width else (longer, side)


def _crop_begin(size, crop):
    return round((size - crop) / 2) if crop <= size else -((crop - size) // 2)


def _levels(image):
    """The bytes of a picture as [1, channels, height, width]."""
    levels = torch.frombuffer(bytearray(image.tobytes()), dtype=torch.uint8)
    return levels.view(1, image.height, image.width, -1).permute(0, 3, 1, 2).contiguous()


# ---------------------------------------------------------------------------------------------
# Command line: models of torchvision


def _torchvision_preprocess(torchvision, name, size):
    """What the first published weights of a model were evaluated with, for another crop size."""
    weights = torchvision.models.get_model_weights(name)
    preset = next(iter(weights)).transforms()
    crop, resize = preset.crop_size[0], preset.resize_size[0]
    return {
        "resize": {
            "shorter_side": round(resize * max(size) / crop),
            "interpolation": preset.interpolation.value,
        },
        "crop": list(size),
        "channels": "RGB",
        "scale": 1 / 255,
        "mean": list(preset.mean),
        "std": list(preset.std),
    }


def torchvision_model(name, size=None, classes=1000, seed=0):
    """(module, preprocess): a classifier of torchvision with seeded weights, for [height, width]
    (default: the size that its published weights were evaluated with)."""
    import torchvision

    crop = next(iter(torchvision.models.get_model_weights(name))).transforms().crop_size[0]
    size = size or (crop, crop)
    options = {"num_classes": classes}
    if name.startswith("vit_"):
        options["image_size"] = _only_square(name, size)
    if name.startswith("maxvit_"):
        options["input_size"] = size
    if name in ("googlenet", "inception_v3"):  # as their weights are published
        options.update(transform_input=True, init_weights=True)
    if name == "googlenet":
        options["aux_logits"] = False
    torch.manual_seed(seed)
    module = torchvision.models.get_model_builder(name)(weights=None, **options)
    return module, _torchvision_preprocess(torchvision, name, size)


def _only_square(name, size):
    if size[0] != size[1]:
        raise ValueError(f"{name} of torchvision takes square images only, not {size[0]}x{size[1]}")
    return size[0]


def settle(module, size, seed=0):
    """Gives a seeded module values that training might have given: see the functions called."""
    calm_down(module)
    vary_constant_parameters(module, seed)
    settle_batch_norm(module, picture_like(8, *size, seed=seed + 2))


def _load_checkpoint(module, path):
    state = torch.load(path, map_location="cpu", weights_only=True)
    for key in ("state_dict", "model"):
        state = state.get(key, state) if isinstance(state.get(key), dict) else state
    module.load_state_dict({k[7:] if k.startswith("module.") else k: v for k, v in state.items()})


def _failed(error):
    print(f"error: {error}", file=sys.stderr)
    return 3


def main(arguments=None):
    parser = argparse.ArgumentParser(
        description="Write a model of torchvision as a bundle.",
        epilog="example: leadsman_export.py --torchvision resnet18 --seed 1 --out resnet18",
    )
    parser.add_argument("--torchvision", metavar="NAME", required=True, help="a model's name")
    parser.add_argument("--checkpoint", metavar="FILE", help="its weights; seeded ones without")
    parser.add_argument("--seed", metavar="N", type=int, default=0, help="of weights and example")
    parser.add_argument("--size", metavar="HxW", help="of the example (default: the model's)")
    parser.add_argument("--picture", metavar="FILE", help="the example (default: a seeded one)")
    parser.add_argument("--labels", metavar="FILE", help="class names (default: torchvision's)")
    parser.add_argument("--out", metavar="DIR", required=True, help="the bundle's folder")
    options = parser.parse_args(arguments)
    try:
        import torchvision
    except ImportError:
        parser.error("--torchvision needs the torchvision package")

    name = options.torchvision
    if name not in torchvision.models.list_models(module=torchvision.models):
        parser.error(f"torchvision {torchvision.__version__} has no classifier named {name}")
    meta = next(iter(torchvision.models.get_model_weights(name)))
    labels = meta.meta["categories"]
    if options.labels:
        try:
            with open(options.labels, encoding="utf-8") as file:
                labels = file.read().splitlines()
        except (OSError, UnicodeDecodeError) as error:
            return _failed(f"{options.labels}: {error}")
    size = None
    if options.size:
        try:
            height, width = options.size.lower().split("x")
            size = (int(height), int(width))
        except ValueError:
            parser.error(f"--size wants HxW, as in 224x224, not {options.size}")

    try:
        module, preprocess = torchvision_model(name, size, len(labels), options.seed)
    except ValueError as error:
        parser.error(str(error))
    example = None
    if not options.picture:
        example = picture_like(1, *preprocess["crop"], seed=options.seed + 1)
    if options.checkpoint:
        try:
            _load_checkpoint(module, options.checkpoint)
        except (OSError, RuntimeError, AttributeError, pickle.UnpicklingError) as error:
            return _failed(
                f"{options.checkpoint} is no checkpoint of {name} with {len(labels)} classes "
                f"(--labels says how many there are): {error}"
            )
    else:
        settle(module, preprocess["crop"], options.seed)
    try:
        summary = export(
            module, example, options.out, labels, preprocess, name=name, picture=options.picture
        )
    except (ExportError, OSError) as error:
        return _failed(error)
    print(f"{options.out}: {summary['layers']} layers, {summary['parameters']:,} parameters")
    return 0


if __name__ == "__main__":
    sys.exit(main())
