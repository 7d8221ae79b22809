"""Bundles no receiver should load, each with the rule that refuses it."""

from __future__ import annotations

import io
import json
import os
import random
import stat
import struct
import warnings
import zipfile

import h5py
import numpy as np
import onnx
from onnx import TensorProto, helper, numpy_helper

from learnclosure.export.layout import sums_text

GRAPH, MANIFEST, REFERENCE = "closure.onnx", "manifest.json", "reference.nc"


def renew_sums(folder):
    files = {path.name: path.read_bytes() for path in folder.iterdir()}
    (folder / "SHA256SUMS").write_bytes(sums_text(files))


def node_of(model, operator):
    return next(node for node in model.graph.node if node.op_type == operator)


def attribute_of(node, name):
    return next(attribute for attribute in node.attribute if attribute.name == name)


def in_bytes(name, change):
    """Change the bytes of one file and renew the sums."""

    def make(folder):
        (folder / name).write_bytes(change((folder / name).read_bytes()))
        renew_sums(folder)
        return folder

    return make


def in_graph(change):
    def altered(content):
        model = onnx.ModelProto.FromString(content)
        change(model)
        return model.SerializeToString()

    return in_bytes(GRAPH, altered)


def in_manifest(change):
    def altered(content):
        manifest = json.loads(content)
        change(manifest)
        return json.dumps(manifest).encode()

    return in_bytes(MANIFEST, altered)


def in_reference(change):
    def altered(content):
        stream = io.BytesIO(content)
        with h5py.File(stream, "r+") as file:
            change(file)
        return stream.getvalue()

    return in_bytes(REFERENCE, altered)


def appended(operator, **attributes):
    def change(model):
        name = model.graph.input[0].name
        model.graph.node.append(helper.make_node(operator, [name], ["more"], **attributes))

    return change


def endless_loop(model):
    """Add a loop whose condition never turns false."""
    true = helper.make_node("Constant", [], ["on"], value=numpy_helper.from_array(np.array(True)))
    boolean = helper.make_tensor_value_info("on", TensorProto.BOOL, [])
    body = helper.make_graph(
        [true],
        "body",
        [
            helper.make_tensor_value_info("turn", TensorProto.INT64, []),
            helper.make_tensor_value_info("before", TensorProto.BOOL, []),
        ],
        [boolean],
    )
    model.graph.node.append(helper.make_node("Loop", ["", ""], [], body=body))


def giant_expand(model):
    shape = numpy_helper.from_array(np.array([10**6, 10**6]), "giant")
    model.graph.initializer.append(shape)
    name = model.graph.input[0].name
    model.graph.node.append(helper.make_node("Expand", [name, "giant"], ["more"]))


def wide_product(model):
    """Add a chain of products that would take minutes for a handful of points."""
    wide = numpy_helper.from_array(np.full((1, 1500), 1e-3), "wide")
    square = numpy_helper.from_array(np.full((1500, 1500), 1e-3), "square")
    model.graph.initializer.extend([wide, square])
    name = model.graph.input[0].name
    model.graph.node.append(helper.make_node("MatMul", [name, "wide"], ["chain_0"]))
    for number in range(40):
        ends = [f"chain_{number}", f"chain_{number + 1}"]
        model.graph.node.append(helper.make_node("MatMul", [ends[0], "square"], [ends[1]]))


def doubling(model):
    name = model.graph.input[0].name
    for number in range(50):
        node = helper.make_node("Concat", [name, name], [f"grown_{number}"], axis=1)
        model.graph.node.append(node)
        name = f"grown_{number}"


def tree_cycle(model):
    trees = node_of(model, "TreeEnsemble")
    inner = attribute_of(trees, "nodes_truenodeids").ints
    leaf = attribute_of(trees, "nodes_trueleafs").ints
    place = next(number for number, flag in enumerate(leaf) if flag == 0)
    inner[place] = place


def leaf_beside_its_table(model):
    gather = node_of(model, "Gather")
    cast = next(node for node in model.graph.node if gather.input[1] in node.output)
    trees = next(node for node in model.graph.node if cast.input[0] in node.output)
    weights = attribute_of(trees, "leaf_weights").t
    changed = numpy_helper.to_array(weights).copy()
    changed[0] = 1e6
    weights.CopyFrom(numpy_helper.from_array(changed))


def external(location):
    def change(model):
        tensor = model.graph.initializer[0]
        tensor.ClearField("raw_data")
        tensor.data_location = TensorProto.EXTERNAL
        tensor.external_data.add(key="location", value=location)

    return change


def external_in_an_attribute(model):
    tensor = attribute_of(node_of(model, "TreeEnsemble"), "leaf_weights").t
    tensor.external_data.add(key="location", value="weights.bin")


def poisoned(model):
    tensor = next(t for t in model.graph.initializer if t.data_type == TensorProto.DOUBLE)
    values = numpy_helper.to_array(tensor).copy()
    values.reshape(-1)[0] = np.nan
    tensor.CopyFrom(numpy_helper.from_array(values, tensor.name))


def other_weights(model):
    """Put a graph in place that gives slightly other numbers."""
    table = [node for node in model.graph.node if node.op_type == "Gather"][-1].input[0]
    tensor = next(tensor for tensor in model.graph.initializer if tensor.name == table)
    values = numpy_helper.to_array(tensor) * (1.0 + 1e-6)
    tensor.CopyFrom(numpy_helper.from_array(values, tensor.name))


def become(content):
    return lambda _: content


def repeated_key(model):
    model.metadata_props.add(key="family", value="mean-field")


def many_empty_nodes(content):
    """Add five million empty nodes in ten megabytes; as objects they would fill gigabytes."""
    nodes = b"\x0a\x00" * 5_000_000
    size = len(nodes)
    head = b"\x3a" + b"".join(
        bytes([(size >> shift & 0x7F) | (0x80 if size >> (shift + 7) else 0)])
        for shift in range(0, 28, 7)
    )
    return content[:2] + head + nodes


def in_archive(change):
    """Pack the bundle and let a function change the list of (entry, content)."""

    def make(folder):
        entries = [
            (zipfile.ZipInfo(path.name), path.read_bytes()) for path in sorted(folder.iterdir())
        ]
        change(entries)
        target = folder.with_suffix(".zip")
        with warnings.catch_warnings(), zipfile.ZipFile(target, "w") as archive:
            # The library warns of what some of these archives are made to do.
            warnings.simplefilter("ignore", UserWarning)
            for entry, content in entries:
                kind = entry.compress_type
                archive.writestr(entry, content, compress_type=kind, compresslevel=1)
        return target

    return make


def deflated(name, content):
    entry = zipfile.ZipInfo(name)
    entry.compress_type = zipfile.ZIP_DEFLATED
    return entry, content


def replace_entry(name, content):
    def change(entries):
        kept = [pair for pair in entries if pair[0].filename != name]
        entries[:] = [*kept, deflated(name, content)]

    return change


def slip(name):
    return lambda entries: entries.append((zipfile.ZipInfo(name), b"boo"))


def link_entry(entries):
    entry = zipfile.ZipInfo("MODEL_CARD.md")
    entry.create_system = 3
    entry.external_attr = (stat.S_IFLNK | 0o777) << 16
    entries[:] = [pair for pair in entries if pair[0].filename != "MODEL_CARD.md"]
    entries.append((entry, b"/etc/hostname"))


def understated(folder):
    """Let the directory of an archive claim that a bomb unpacks to little."""
    path = in_archive(replace_entry("MODEL_CARD.md", b"\0" * (30 << 20)))(folder)
    content = bytearray(path.read_bytes())
    size = struct.pack("<I", 30 << 20)
    while (place := content.find(size)) >= 0:
        content[place : place + 4] = struct.pack("<I", 1000)
    path.write_bytes(bytes(content))
    return path


def cut_archive(folder):
    path = in_archive(list)(folder)
    path.write_bytes(path.read_bytes()[:-1000])
    return path


def huge_directory(folder):
    path = in_archive(list)(folder)
    content = bytearray(path.read_bytes())
    content[-12:-8] = struct.pack("<H", 0xFFFF) * 2
    content[-10:-6] = struct.pack("<I", 1 << 30)
    path.write_bytes(bytes(content))
    return path


def linked_file(folder):
    (folder / "MODEL_CARD.md").rename(folder.parent / "card")
    (folder / "MODEL_CARD.md").symlink_to(folder.parent / "card")
    return folder


def waiting_pipe(folder):
    (folder / "MODEL_CARD.md").unlink()
    os.mkfifo(folder / "MODEL_CARD.md")
    return folder


def without(key):
    return lambda manifest: manifest.pop(key)


def set_in(*keys):
    *path, last, value = keys

    def change(manifest):
        for key in path:
            manifest = manifest[key]
        manifest[last] = value

    return change


def endless_variable(file):
    del file["trust"]
    file.create_dataset("trust", shape=(10**13,), chunks=(10**6,), dtype="f8")


def linked_variable(file):
    del file["trust"]
    file["trust"] = h5py.ExternalLink("/etc/hostname", "/trust")


def outside_variable(file):
    count = file["trust"].shape
    del file["trust"]
    file.create_dataset(
        "trust", shape=count, dtype="f8", external=[("/etc/hostname", 0, 8 * count[0])]
    )


def noise(content):
    return random.Random(0).randbytes(len(content))


HOSTILE = {
    "cut off": ("graph-bytes", in_bytes(GRAPH, lambda content: content[: len(content) // 2])),
    "one byte short": ("graph-bytes", in_bytes(GRAPH, lambda content: content[:-1])),
    "empty": ("graph-bytes", in_bytes(GRAPH, become(b""))),
    "random bytes": ("graph-bytes", in_bytes(GRAPH, noise)),
    "unknown field": ("graph-bytes", in_bytes(GRAPH, lambda content: content + b"\xf8\x07\x01")),
    "second graph": ("graph-repeated", in_bytes(GRAPH, lambda content: content + b"\x3a\x00")),
    "empty nodes": ("graph-count", in_bytes(GRAPH, many_empty_nodes)),
    "added operator": ("operators", in_graph(appended("Custom", domain="elsewhere"))),
    "added plain operator": ("operators", in_graph(appended("NonZero"))),
    "giant expand": ("operators", in_graph(giant_expand)),
    "endless loop": ("subgraphs", in_graph(endless_loop)),
    "function": ("functions", in_graph(lambda m: m.functions.add(name="f", domain="d"))),
    "training": ("training-information", in_graph(lambda m: m.training_info.add())),
    "external data beside": ("external-data", in_graph(external("weights.bin"))),
    "external data above": ("external-data", in_graph(external("../../weights.bin"))),
    "external data absolute": ("external-data", in_graph(external("/etc/hostname"))),
    "external data in an attribute": ("external-data", in_graph(external_in_an_attribute)),
    "repeated key": ("metadata-keys", in_graph(repeated_key)),
    "weights not numbers": ("finite-weights", in_graph(poisoned)),
    "doubling arrays": ("value-sizes", in_graph(doubling)),
    "long products": ("work", in_graph(wide_product)),
    "tree cycle": ("tree-cycles", in_graph(tree_cycle)),
    "tree index": (
        "tree-indices",
        in_graph(
            lambda m: attribute_of(node_of(m, "TreeEnsemble"), "nodes_featureids").ints.__setitem__(
                0, 10**6
            )
        ),
    ),
    "row beside its table": ("gather-indices", in_graph(leaf_beside_its_table)),
    "swapped graph": ("reference-outputs", in_graph(other_weights)),
    "wrong sum": ("sums", lambda folder: (folder / GRAPH).write_bytes(b"x") and folder),
    "newer schema": ("schema-version", in_manifest(set_in("schema", "2"))),
    "no schema": ("schema-version", in_manifest(without("schema"))),
    "manifest twice the key": (
        "manifest-json",
        in_bytes(MANIFEST, become(b'{"schema": "1", "schema": "1"}')),
    ),
    "manifest with NaN": (
        "manifest-json",
        in_manifest(set_in("bounds", "floor", float("nan"))),
    ),
    "manifest too deep": ("manifest-json", in_bytes(MANIFEST, become(b"[" * 10**6))),
    "manifest without a field": ("manifest-fields", in_manifest(without("fallback"))),
    "manifest with text for bounds": (
        "manifest-fields",
        in_manifest(set_in("bounds", "cap", "high")),
    ),
    "other family": ("manifest-graph", in_manifest(set_in("family", "mean-field"))),
    "no version": ("version", in_manifest(set_in("version", "newest"))),
    "no licence": ("licence", in_manifest(set_in("licence", "do what; you like"))),
    "wrong unit": ("units", in_manifest(set_in("inputs", 0, "units", "km s-1"))),
    "wrong symmetry": ("units", in_manifest(set_in("inputs", 0, "parity", "scalar"))),
    "wrong shape": ("shapes", in_manifest(set_in("inputs", 0, "shape", ["N", 2]))),
    "wrong range": ("input-ranges", in_manifest(set_in("inputs", 0, "range_in_regions", [-9, 9]))),
    "wrong trained range": (
        "trained-ranges",
        in_manifest(set_in("features", 0, "trained_range", [-1e9, 1e9])),
    ),
    "wrong bounds": ("declared-bounds", in_manifest(set_in("bounds", "floor", 400.0))),
    "other number of points": ("reference-count", in_manifest(set_in("reference", "points", 1))),
    "reference of noise": ("reference-form", in_bytes(REFERENCE, noise)),
    "reference without end": ("reference-form", in_reference(endless_variable)),
    "reference linked": ("reference-form", in_reference(linked_variable)),
    "reference outside": ("reference-form", in_reference(outside_variable)),
    "file linked": ("file-kind", linked_file),
    "file a pipe": ("file-kind", waiting_pipe),
    "archive slip": ("archive-path", in_archive(slip("../../escaped"))),
    "archive absolute": ("archive-path", in_archive(slip("/tmp/escaped"))),
    "archive folder": ("archive-path", in_archive(slip("inner/manifest.json"))),
    "archive backslash": ("archive-path", in_archive(slip("..\\escaped"))),
    "archive bomb": (
        "file-size",
        in_archive(replace_entry("MODEL_CARD.md", b"\0" * (64 << 20))),
    ),
    "archive bomb understated": ("archive-format", understated),
    "archive link": ("archive-entry", in_archive(link_entry)),
    "archive twice the name": (
        "archive-entry",
        in_archive(lambda e: e.append((zipfile.ZipInfo("MODEL_CARD.md"), b""))),
    ),
    "archive cut off": ("archive-format", cut_archive),
    "archive directory": ("archive-format", huge_directory),
    "archive of one more": ("file-list", in_archive(slip("note.txt"))),
}
"""What each is called: the rule that refuses it, and a function from a good folder to it."""
