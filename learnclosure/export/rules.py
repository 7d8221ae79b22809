"""Every rule a bundle is held to, by name; a refusal names the one it broke."""

from __future__ import annotations

from typing import NamedTuple


class Rule(NamedTuple):
    """One rule of the gate.

    Attributes
    ----------
    check : str
        Check of ``learnclosure verify`` it belongs to.
    meaning : str
        What must hold.
    """

    check: str
    meaning: str


RULES: dict[str, Rule] = {
    "archive-format": Rule("files", "an archive is a plain ZIP file without comment or extension"),
    "archive-path": Rule("files", "entries of an archive lie at its top, under the known names"),
    "archive-entry": Rule("files", "entries are unique plain files, stored or deflated, not links"),
    "file-list": Rule("files", "every required file is there, and none but the optional ones"),
    "file-kind": Rule("files", "every file is a plain file, not a link, folder or device"),
    "file-size": Rule("files", "no file is larger, packed or unpacked, than a receiver reads"),
    "sums": Rule("sums", "the SHA-256 of every file is the one in SHA256SUMS"),
    "signature": Rule("signature", "SHA256SUMS.sig is a signer's OpenSSH signature of SHA256SUMS"),
    "manifest-json": Rule("schema", "the manifest is one JSON object without repeated keys or NaN"),
    "schema-version": Rule("schema", "the schema of the manifest is one this receiver knows"),
    "graph-bytes": Rule("graph bytes", "the file is one whole protobuf message of known fields"),
    "graph-repeated": Rule("graph bytes", "no field that may stand once stands twice"),
    "graph-count": Rule("graph bytes", "nodes, constants and fields stay below fixed numbers"),
    "subgraphs": Rule("graph bytes", "no attribute holds a graph, so nothing loops or branches"),
    "functions": Rule("graph bytes", "the model defines no functions and refers to none"),
    "external-data": Rule("graph bytes", "no constant lies outside the file"),
    "training-information": Rule("graph bytes", "the model holds no training information"),
    "plain-constants": Rule("graph bytes", "constants are dense, raw, unquantised and in one part"),
    "inner-shapes": Rule("graph bytes", "the model declares no shapes of inner values"),
    "graph-versions": Rule("graph format", "IR and operator sets are exactly those written"),
    "metadata-keys": Rule("graph format", "no key of the model's properties stands twice"),
    "graph-interface": Rule("graph format", "inputs and outputs are doubles of shape (N, 1)"),
    "operators": Rule("graph operators", "every operator is on the closed list"),
    "attributes": Rule("graph operators", "every attribute is one its operator may carry"),
    "cast-types": Rule("graph operators", "casts lead to double, single or 64-bit integers"),
    "constant-types": Rule("graph constants", "constants are double, 64-bit integer or bytes"),
    "constant-sizes": Rule("graph constants", "constants hold as many numbers as they declare"),
    "finite-weights": Rule("graph constants", "every constant is finite"),
    "names": Rule("graph connections", "every value is made once, under a name of its own"),
    "order": Rule("graph connections", "every value is made before it is used"),
    "types-and-shapes": Rule("graph shapes", "types and shapes follow from the operators"),
    "value-sizes": Rule("graph shapes", "values hold a known, bounded number of numbers a point"),
    "work": Rule("graph shapes", "the arithmetic for one point stays below a fixed number"),
    "tree-form": Rule("graph trees", "trees have all their lists, equally long, and only add"),
    "tree-indices": Rule("graph trees", "every index of a tree is in range"),
    "tree-cycles": Rule("graph trees", "every tree node is reached from a root in just one way"),
    "gather-indices": Rule("graph trees", "what is looked up lies in its table"),
    "manifest-fields": Rule("manifest form", "the manifest has every field, of the right type"),
    "manifest-graph": Rule("manifest form", "manifest and graph say the same of themselves"),
    "version": Rule("manifest form", "the version is a semantic version"),
    "licence": Rule("manifest form", "the licence has the form of an SPDX expression"),
    "trained-ranges": Rule("manifest form", "trained ranges are those the graph guards"),
    "quantities": Rule("declared inputs", "declared inputs and outputs are the graph's, in order"),
    "units": Rule("declared inputs", "units and symmetry are those of the quantity"),
    "shapes": Rule("declared inputs", "declared shape and type are those of the graph"),
    "reference-form": Rule("reference points", "reference.nc is NetCDF-4 with plain variables"),
    "reference-count": Rule("reference points", "it has as many points as the manifest says"),
    "input-ranges": Rule("reference points", "declared ranges of inputs are those of its points"),
    "declared-bounds": Rule("reference points", "tensors and trust stay in the declared bounds"),
    "run-limits": Rule("reference outputs", "the graph runs within limits of time and memory"),
    "reference-outputs": Rule("reference outputs", "the graph gives the outputs that ship with it"),
    "single-precision": Rule(
        "single precision", "the variant is the same closure within the tolerance it states"
    ),
}
"""Rules by name, in the order in which they are applied."""
