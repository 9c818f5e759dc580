"""The report: from an assessment to a page, a PDF, plain text, and data for other programs."""

from harness.report.assemble import assemble
from harness.report.document import Document
from harness.report.material import Material, material_of

__all__ = ["Document", "Material", "assemble", "material_of"]
