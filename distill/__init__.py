"""voc-distill: exact value of computation, distilled into a fast CPU scorer.

Nothing heavy is imported here: `import distill.runtime` must work with numpy and onnxruntime alone.
"""

__version__ = "0.1.0"
