#!/usr/bin/env python3
"""Write a PyTorch image model as a bundle: graph.json, weights.safetensors, reference.safetensors.

    from leadsman_export import export
    export(model, torch.rand(1, 3, 224, 224), "my_model", labels=["horn", "pearl"])

    python3 leadsman_export.py --torchvision resnet18 --checkpoint resnet18.pth --out resnet18

The bundle's format is described in loaders/GRAPH_FORMAT.md. This file needs torch (1.13 or later)
and numpy; torchvision only for its command line.

How it works, in the order of this file:
  1. errors, and files written whole or not at all;
  2. the model is traced with torch.fx, and every node is run on the example as it is traced: its
     value is the reference, and tells sizes from data;
  3. nodes become layers: a handler for each module type, function or method (tables at "Handlers").
     A tensor between layers is a `Wire`; reshape, permute and the like only change how the next
     operation sees it (`View`), until the axes spell a form that an operator produces (`FORMS`);
  4. `export`, helpers that give untrained models weights worth comparing, the command line.

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
        has_children = next(m.children(), None) is not None
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
# Sizes have one-letter names: an image is "NCHW", tokens "NTC", features "NC". Axes are strings of
# them: an image whose positions are merged has the axes ("N", "C", "HW"), a row-major reading. An
# empty string is an axis of size 1 that was put in.


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


@dataclasses.dataclass(eq=False)
class View:
    """A wire as the traced program sees it."""

    wire: Wire
    axes: tuple

    def is_plain(self):
        return self.axes == tuple(self.wire.sizes)

    def axis(self, dim):
        return dim % len(self.axes)


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


# Views that a layer of their own produces: (sizes, axes) -> operator, sizes of its output.
FORMS = {
    ("NCHW", ("N", "HW", "C")): ("image_to_tokens", "NTC"),
    ("NCHW", ("N", "CHW")): ("flatten", "NC"),
    ("NTC", ("N", "TC")): ("flatten", "NC"),
}

# Attributes equal to these are left out of the graph.
ATTRIBUTE_DEFAULTS = {
    "conv2d": {"stride": [1, 1], "padding": [0] * 4, "dilation": [1, 1], "groups": 1},
    "max_pool": {"padding": [0] * 4, "dilation": [1, 1], "ceil_mode": False},
    "avg_pool": {"padding": [0] * 4, "ceil_mode": False, "count_padding": True},
    "mean": {"keep": False},
}


def _regrouped(view, shape):
    """The axes of `view` reshaped to `shape`, or None when an axis would have to be split."""
    sizes = view.wire.size_of()
    letters = list("".join(view.axes))
    axes = []
    for wanted in shape:
        axis, product = "", 1
        while letters and product * sizes[letters[0]] <= wanted and (product < wanted or not axis):
            product *= sizes[letters[0]]
            axis += letters.pop(0)
        if product != wanted:
            return None
        axes.append(axis)
    if any(sizes[letter] != 1 for letter in letters):
        return None
    axes[-1] += "".join(letters)
    return tuple(axes)


def _in_wire_order(tensor, axes, sizes, order):
    """The tensor that the program sees as `axes`, spread to single sizes in `order`."""
    spread = "".join(axes)
    tensor = tensor.reshape([sizes[letter] for letter in spread])
    return tensor.permute([spread.index(letter) for letter in order]).contiguous()


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
        return View(wire, tuple(sizes))

    def _output(self, node):
        values = []
        fx.node.map_arg(node.args[0], lambda n: values.append(self.converted[n]))
        origin = Origin("", type(self.module).__name__)
        for value in values:
            if isinstance(value, Refused):
                raise ExportError(value.reason, origin, value.advice)
            if not isinstance(value, View):
                raise ExportError(
                    "an output of the model does not depend on its input",
                    origin,
                    "return only tensors that are computed from the input",
                )
            if not value.is_plain():
                raise ExportError(
                    f"the output {value.wire.name} is returned with its axes rearranged",
                    origin,
                    "return images as [N, C, H, W], tokens as [N, T, C], features as [N, C]",
                )
            self.outputs.append(value.wire.name)
        if not self.outputs:
            raise ExportError("the model returns no tensor", origin, "return one or more tensors")
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
            sizes = tuple(n if axis == "C" else Size(n) for n, axis in zip(shape, view.axes))
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
                if not (isinstance(seen, View) and isinstance(after, View)) or (
                    seen.wire is not before.wire or after.wire.sizes != seen.wire.sizes
                ):
                    raise ExportError(
                        f"{node.name} changes a tensor in place of which {other.name} is a part",
                        self.tracer.origins[node],
                        "use the operation that is not in place",
                    )
                self.converted[other] = View(after.wire, seen.axes)

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
        if tensor.dtype not in _SAFETENSORS_DTYPES:
            site.fail(f"a weight of type {tensor.dtype}", "use floating-point weights")
        name = self.checkpoint_names.get(id(tensor))
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
            tensor = tensor.detach().clone()
        self.weights[name] = tensor
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
    return isinstance(value, (View, Refused))


class Site:
    """One node as its handler sees it: where it stands, what PyTorch computed, what it emits."""

    def __init__(self, builder, node):
        self.builder, self.node = builder, node
        self.origin = builder.tracer.origins[node]
        self.value = builder.tracer.value(node)
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
        return self.fail(
            f"{self.operation} is given {type(value).__name__.lower()} where it needs a tensor "
            "computed from the input",
            "no operator takes a constant here; fold it into a neighbouring layer's weights",
        )

    def plain(self, value, *allowed):
        """A view that is a wire as it stands, of one of the allowed kinds ("NCHW", ...)."""
        view = self.view(value)
        if not view.is_plain() or view.wire.sizes not in allowed:
            names = {
                "NCHW": "an image [N, C, H, W]",
                "NTC": "tokens [N, T, C]",
                "NC": "features [N, C]",
            }
            shape = [tuple(axis) if len(axis) != 1 else axis for axis in view.axes]
            self.fail(
                f"{self.operation} needs {' or '.join(names[a] for a in allowed)}, but gets "
                f"{view.wire.name} with the axes {shape}",
                "rearrange the tensor before this operation",
            )
        return view

    def last_is_channels(self, value):
        view = self.view(value)
        if view.axes[-1] != "C":
            self.fail(
                f"{self.operation} runs along an axis of {view.wire.name} other than its channels",
                "bring the channels to the last axis first",
            )
        return view

    def same_form(self, values):
        views = [self.view(value) for value in values]
        first = views[0]
        for view in views[1:]:
            if (view.axes, view.wire.sizes) != (first.axes, first.wire.sizes):
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
        sizes=None, axes=None, short=None, name=None, tensor=None, size_of=None, **wire_fields,
    ):  # fmt: skip
        """Emits a layer and returns the view of its output that the program sees.

        By default the output has the first input's sizes and axes. `sizes` names those of another
        kind. The reference is the node's value, put back into the wire's order, unless `tensor` is
        given in that order; `size_of` overrides sizes that changed within merged axes.
        """
        first = inputs[0]
        axes = axes or (tuple(sizes) if sizes else first.axes)
        sizes = sizes or first.wire.sizes
        name = self.builder.unique_name(
            name or self.name(short or self.short_name()), not self.is_module
        )
        if tensor is None:
            known = {**first.wire.size_of(), **(size_of or {})}
            known.update((a, n) for a, n in zip(axes, self.result.shape) if len(a) == 1)
            tensor = _in_wire_order(self.result, axes, known, sizes)
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
        return View(wire, axes)

    def see(self, view, axes):
        """The same wire with other axes; a layer of its own when an operator produces that form."""
        form = FORMS.get((view.wire.sizes, axes))
        if not form:
            return View(view.wire, axes)
        operator_name, sizes = form
        fields = {"patches": view.wire} if operator_name == "image_to_tokens" else {}
        plain = View(view.wire, tuple(view.wire.sizes))
        return self.layer(
            operator_name, [plain], sizes=sizes, short=operator_name, tensor=self.result, **fields
        )


# ---------------------------------------------------------------------------------------------
# Handlers: tables

MODULES = {}  # module type, or its full name where importing it is optional -> handler
FUNCTIONS = {}  # function -> handler
METHODS = {}  # name of a tensor's method -> handler


def handles(*keys):
    """Registers a handler for module types, functions and names: "relu" is a tensor's method,
    a name with dots is a module type that need not be importable."""

    def register(handler):
        for key in keys:
            is_module = isinstance(key, type) or (isinstance(key, str) and "." in key)
            table = MODULES if is_module else METHODS if isinstance(key, str) else FUNCTIONS
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
    if view.wire.sizes not in ("NTC", "NC"):
        site.fail(
            f"{site.operation} on the image {view.wire.name}",
            "use a 1x1 convolution, or turn the image into tokens first",
        )
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
    view = site.plain(input, "NCHW", "NC")
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


# ---------------------------------------------------------------------------------------------
# Handlers: activations

# kind -> module types, functions, methods. Those with an argument of their own follow below.
ACTIVATIONS = {
    "relu": (nn.ReLU, F.relu, F.relu_, torch.relu, torch.relu_, "relu", "relu_"),
    "relu6": (nn.ReLU6, F.relu6),
    "silu": (nn.SiLU, F.silu),
    "sigmoid": (nn.Sigmoid, torch.sigmoid, torch.sigmoid_, F.sigmoid, "sigmoid", "sigmoid_"),
    "hard_sigmoid": (nn.Hardsigmoid, F.hardsigmoid),
    "hard_swish": (nn.Hardswish, F.hardswish),
    "tanh": (nn.Tanh, torch.tanh, torch.tanh_, F.tanh, "tanh", "tanh_"),
}


def _activation(site, input, kind, **attributes):
    return site.layer("activation", [site.view(input)], {"kind": kind, **attributes})


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


@handles(F.gelu)
def _gelu(site, input, approximate="none"):
    return _activation(site, input, {"none": "gelu", "tanh": "gelu_tanh"}[approximate])


@handles(nn.GELU)
def _gelu_module(site, m, input):
    return _gelu(site, input, getattr(m, "approximate", "none"))


@handles(F.softmax, torch.softmax, "softmax")
def _softmax(site, input, dim=None, _stacklevel=3, dtype=None):
    view = site.view(input)
    if dim is None:  # torch's own choice when none is given
        dim = 0 if len(view.axes) in (0, 1, 3) else 1
    if view.wire.sizes not in ("NTC", "NC") or view.axes[view.axis(dim)] != "C":
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
    if alpha != 1:
        site.fail(f"add with alpha={alpha}", "scale in a layer of its own")
    if isinstance(other, Constant) and isinstance(input, View):
        return _position_embed(site, input, other)
    if isinstance(input, Constant) and isinstance(other, View):
        return _position_embed(site, other, input)
    views = site.same_form([input, other])
    if views[0].wire.tensor.shape != views[1].wire.tensor.shape:
        site.fail(
            f"{site.operation} repeats one of its operands along an axis",
            "both operands of an addition need the same shape",
        )
    return site.layer("add", views)


@handles(operator.mul, operator.imul, torch.mul, torch.multiply, "mul", "mul_", "multiply")
def _mul(site, input, other):
    views = site.same_form([input, other])
    shapes = [list(view.wire.tensor.shape) for view in views]
    factors = [
        view.wire.sizes == "NCHW" and shape[2:] == [1, 1] for view, shape in zip(views, shapes)
    ]
    if shapes[0] != shapes[1]:
        if factors[0]:
            views.reverse()
        elif not factors[1]:
            site.fail(
                f"{site.operation} multiplies shapes {shapes[0]} and {shapes[1]}",
                "operands need one shape, or are an image and its channels' factors [N, C, 1, 1]",
            )
    return site.layer("mul", views)


def _position_embed(site, tokens, positions):
    """tokens + parameter [1, T, C]; the parameter is fitted to other grids of patches."""
    view = site.view(tokens)
    shape = list(view.wire.tensor.shape)
    if view.wire.sizes != "NTC" or list(positions.tensor.shape[-2:]) != shape[1:]:
        site.fail(
            f"{site.operation} adds a constant of shape {list(positions.tensor.shape)} to "
            f"{view.wire.name}",
            "only positions [1, T, C] can be added to tokens; fold other constants into a bias",
        )
    site.plain(tokens, "NTC")
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
        inputs.append(View(patches, tuple("NCHW")))
    else:
        prefix = 0
    return site.layer(
        "position_embed", inputs, {"prefix_tokens": prefix}, {"weight": positions},
        short="position_embed",
    )  # fmt: skip


@handles(torch.cat, getattr(torch, "concat", torch.cat))
def _concat(site, tensors, dim=0):
    parts = list(tensors)
    if len(parts) == 2 and isinstance(parts[0], Constant) and isinstance(parts[1], View):
        return _class_token(site, parts[0], parts[1], dim)
    views = site.same_form(parts)
    if views[0].axes[views[0].axis(dim)] != "C":
        site.fail(f"{site.operation} along axis {dim}", "only channels can be joined")
    if len(views) == 1:
        return views[0]
    return site.layer("concat", views)


def _class_token(site, token, tokens, dim):
    """cat([parameter [1, K, C] repeated for the batch, tokens], 1)."""
    view = site.plain(tokens, "NTC")
    same = bool((token.tensor == token.tensor[:1]).all())
    if view.axis(dim) != 1 or token.tensor.dim() != 3 or not same:
        site.fail(
            f"{site.operation} joins a constant of shape {list(token.tensor.shape)}",
            "a parameter [1, K, C] can be put before tokens, along axis 1",
        )
    first = Constant(token.tensor[:1], token.sources, token.sized)
    return site.layer(
        "class_token", [view], {}, {"weight": first},
        short="class_token", prefix=view.wire.prefix + token.tensor.shape[1],
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
    return site.layer("max_pool", [site.plain(input, "NCHW")], attributes)


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
    return site.layer("avg_pool", [view], attributes)


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


@handles(torch.mean, "mean")
def _mean(site, input, dim=None, keepdim=False, *, dtype=None):
    view = site.view(input)
    dims = [dim] if isinstance(dim, int) else list(dim or range(len(view.axes)))
    dims = {view.axis(d) for d in dims}
    averaged = set("".join(view.axes[d] for d in dims))
    left = tuple(axis for d, axis in enumerate(view.axes) if d not in dims)
    if averaged != set(view.wire.sizes) - set("NC") or left != ("N", "C") or not averaged:
        site.fail(
            f"mean over the axes {sorted(dims)} of {view.wire.name}",
            "average over all positions: axes 2 and 3 of an image, axis 1 of tokens",
        )
    if not keepdim:
        return site.layer("mean", [view], {"keep": False}, sizes="NC")
    return site.layer(
        "mean", [view], {"keep": True}, axes=view.axes, size_of=dict.fromkeys(averaged, 1),
        **({"patches": None, "prefix": 0} if view.wire.sizes == "NTC" else {}),
    )  # fmt: skip


# ---------------------------------------------------------------------------------------------
# Handlers: shapes. Sizes need no reading: PyTorch's result says what came of them.


@handles(torch.flatten, torch.reshape, "flatten", "reshape", "view", "unflatten", "view_as")
def _reshape(site, input, *_, **__):
    view = site.view(input)
    axes = _regrouped(view, site.result.shape)
    if axes is None:
        site.fail(
            f"{site.operation} splits an axis of {view.wire.name}: from "
            f"{list(view.wire.tensor.shape)} to {list(site.result.shape)}",
            "axes can be merged and rearranged, not split",
        )
    return site.see(view, axes)


@handles(nn.Flatten)
def _flatten_module(site, m, input):
    return _reshape(site, input)


@handles(torch.permute, "permute")
def _permute(site, input, *dims):
    view = site.view(input)
    dims = dims[0] if isinstance(dims[0], (tuple, list)) else dims
    return site.see(view, tuple(view.axes[view.axis(d)] for d in dims))


@handles(torch.transpose, torch.swapaxes, "transpose", "swapaxes", "swapdims")
def _transpose(site, input, dim0, dim1):
    view = site.view(input)
    order = list(range(len(view.axes)))
    first, second = view.axis(dim0), view.axis(dim1)
    order[first], order[second] = second, first
    return _permute(site, view, order)


@handles(torch.squeeze, "squeeze")
def _squeeze(site, input, dim=None):
    if dim is None:
        site.fail("squeeze of every axis of size 1", "name the axis: squeeze(dim)")
    return _reshape(site, input)


@handles(torch.unsqueeze, "unsqueeze")
def _unsqueeze(site, input, dim):
    view = site.view(input)
    place = dim % (len(view.axes) + 1)
    return site.see(view, view.axes[:place] + ("",) + view.axes[place:])


@handles(operator.getitem)
def _getitem(site, value, index):
    if isinstance(value, (tuple, list)):
        return value[index]
    view = site.view(value)
    parts = list(index) if isinstance(index, tuple) else [index]
    if Ellipsis in parts:
        place = parts.index(Ellipsis)
        parts[place : place + 1] = [slice(None)] * (len(view.axes) - len(parts) + 1)
    parts += [slice(None)] * (len(view.axes) - len(parts))
    taken = [d for d, part in enumerate(parts) if part != slice(None)]
    if len(taken) == 1 and type(parts[taken[0]]) is int:
        return _select(site, view, taken[0], parts[taken[0]])
    if not taken:
        return view
    return site.fail(
        f"indexing of {view.wire.name} by {index}",
        "only one token can be taken out: x[:, index]",
    )


@handles(torch.select, "select")
def _select(site, input, dim, index):
    view = site.view(input)
    dim = view.axis(dim)
    left = view.axes[:dim] + view.axes[dim + 1 :]
    if view.wire.sizes != "NTC" or view.axes[dim] != "T" or left != ("N", "C"):
        site.fail(
            f"a selection along axis {dim} of {view.wire.name}",
            "only one token can be taken out: x[:, index]",
        )
    if index < 0:
        site.fail("a token counted from the end", "count from the start: x[:, index]")
    return site.layer("select", [view], {"index": index}, sizes="NC", short="select")


# ---------------------------------------------------------------------------------------------
# Handlers: what does nothing at inference


@handles("contiguous", "clone", "detach", "float", "to", "type_as", "requires_grad_", torch.clone)
def _vanish(site, input, *_, **__):
    return site.view(input)


@handles(
    nn.Identity,
    nn.Dropout,
    nn.Dropout2d,
    nn.AlphaDropout,
    "torchvision.ops.stochastic_depth.StochasticDepth",
)
def _identity_module(site, m, input):
    return site.layer("identity", [site.view(input)])


@handles(F.dropout, F.dropout2d, F.alpha_dropout)
def _dropout(site, input, p=0.5, training=True, inplace=False):
    if training and p > 0:
        site.fail(
            f"{site.operation} drops values at inference too",
            "pass training=self.training",
        )
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
    views = [site.view(v) for v in (query, key, value)]
    axes = ("N", "T", "C") if m.batch_first else ("T", "N", "C")
    for view in views:
        if view.wire.sizes != "NTC" or view.axes != axes:
            site.fail(
                f"attention with batch_first={m.batch_first} gets {view.wire.name} with the axes "
                f"{view.axes}",
                "pass tokens [N, T, C] to attention with batch_first=True, or transposed without",
            )
    tokens = [View(view.wire, tuple("NTC")) for view in views]
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
    return View(out.wire, axes), second


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
# Export


def export(module, example_input, folder, labels=None, preprocess=None, reference=True, name=None):
    """Writes `module` as a bundle into `folder` (made if it is not there).

    module          any nn.Module; it is run in eval mode and left as it was
    example_input   a tensor [N, C, H, W] (or [N, T, C], [N, C]), or a tuple of several, for the
                    first parameters of forward; others keep their defaults
    labels          optional class names, written to labels.txt
    preprocess      optional dict, see GRAPH_FORMAT.md
    reference       whether to write every layer's output for the example
    name            the graph's name; the folder's when None

    Returns {"layers": count, "parameters": count, "unused": names of the checkpoint's tensors that
    the graph does not need}. Raises ExportError for what cannot be exported; nothing is written
    then.
    """
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
    document.update(inputs=builder.inputs, outputs=builder.outputs, layers=builder.layers)
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
        metadata = {"library": "torch", "version": str(torch.__version__)}
        write_safetensors(stale, tensors, metadata)
    return {
        "layers": len(builder.layers),
        "parameters": sum(tensor.numel() for tensor in builder.weights.values()),
        "unused": [
            name
            for name, tensor in builder.checkpoint.items()
            if name not in builder.weights and tensor.is_floating_point()
        ],
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
    applying them would not show.
    """
    generator = torch.Generator().manual_seed(seed)
    with torch.no_grad():
        for parameter in module.parameters():
            if parameter.numel() == 0 or not bool((parameter == parameter.flatten()[0]).all()):
                continue
            value = float(parameter.flatten()[0])
            noise = torch.randn(parameter.shape, generator=generator).to(parameter.dtype)
            fan_in = parameter[0].numel() if parameter.dim() == 2 else 100
            spread = 0.1 * abs(value) if value else 1 / math.sqrt(fan_in)
            parameter.copy_(value + spread * noise)


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
    crop = meta.transforms().crop_size[0]
    size = (crop, crop)
    if options.size:
        try:
            height, width = options.size.lower().split("x")
            size = (int(height), int(width))
        except ValueError:
            parser.error(f"--size wants HxW, as in 224x224, not {options.size}")

    torch.manual_seed(options.seed)
    builder = torchvision.models.get_model_builder(name)
    extra = {"num_classes": len(labels)}
    if name.startswith("vit_"):  # asserts its image size
        if size[0] != size[1]:
            parser.error(f"{name} of torchvision takes square images only, not {options.size}")
        extra["image_size"] = size[0]
    if re.match("(wide_)?res(net|next)", name):  # as they are trained (Goyal et al. 2017)
        extra["zero_init_residual"] = True
    module = builder(weights=None, **extra)
    example = picture_like(1, *size, seed=options.seed + 1)
    if options.checkpoint:
        try:
            _load_checkpoint(module, options.checkpoint)
        except (OSError, RuntimeError, AttributeError, pickle.UnpicklingError) as error:
            return _failed(
                f"{options.checkpoint} is no checkpoint of {name} with {len(labels)} classes "
                f"(--labels says how many there are): {error}"
            )
    else:
        vary_constant_parameters(module, options.seed)
        settle_batch_norm(module, picture_like(8, *size, seed=options.seed + 2))
    preprocess = _torchvision_preprocess(torchvision, name, size)
    try:
        summary = export(module, example, options.out, labels, preprocess, name=name)
    except (ExportError, OSError) as error:
        return _failed(error)
    print(f"{options.out}: {summary['layers']} layers, {summary['parameters']:,} parameters")
    return 0


if __name__ == "__main__":
    sys.exit(main())
