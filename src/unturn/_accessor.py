"""The PyVista plug-in: ``mesh.unturn`` on every mesh of PyVista, found through the ``pyvista.accessors`` entry points.

Delegation only: a mesh becomes a `Result`, a function of `unturn` works on it, a new mesh comes out.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import pyvista

from unturn._api import strain
from unturn.io.vtk_arrays import update_attributes
from unturn.io.vtk_result import result_from_vtk, vtk_from_result
from unturn.result import Result

if TYPE_CHECKING:
    from unturn.pictures.image import Image


class UnturnAccessor:
    """What `unturn` offers on a mesh.

    Parameters
    ----------
    mesh
        The mesh it hangs on; never changed.
    """

    def __init__(self, mesh: Any) -> None:
        self._mesh = mesh

    def strain(self, **options: Any) -> Any:
        """Return a new mesh of the same class with strain, rotation and what follows from them as arrays.

        With ``at="surface"`` the free faces of solids, with ``at="quadrature"`` a cloud of points, with
        ``borders="split"`` an unstructured grid with duplicated points.

        Parameters
        ----------
        **options
            The keywords of `unturn.strain`: ``displacement``, ``measures``, ``at``, ``plane``, ``poisson`` ... ``zero`` and
            ``previous`` take meshes too.

        Returns
        -------
        pyvista.DataSet
            Shares points and old arrays with the mesh, as `copy(deep=False)` does. The new arrays are float64,
            symmetric tensors in the order XX, YY, ZZ, XY, YZ, XZ with tensor shear, NaN where a cell cannot be
            computed; strain is dimensionless, rotation in radians.

        Raises
        ------
        DisplacementError
            No displacement array, or several candidates and none chosen.
        UsageError
            Unknown names, options that do not fit the mesh, or an array of that name is already there.
        InputError
            No cell, or no computable element.

        Examples
        --------
        >>> import pyvista
        >>> import unturn._accessor  # not needed once the package is installed
        >>> mesh = pyvista.ImageData(dimensions=(3, 3, 3)).cast_to_unstructured_grid()
        >>> mesh.point_data["u"] = mesh.points * [1e-3, -0.3e-3, -0.3e-3]
        >>> round(mesh.unturn.strain()["equivalent_strain"][0] * 1e6)
        867
        """
        before = result_from_vtk(self._mesh)
        if isinstance(options.get("zero"), pyvista.DataSet):
            options["zero"] = result_from_vtk(options["zero"])
        if "previous" in options:
            given = options["previous"]
            meshes = [given] if isinstance(given, pyvista.DataSet | Result) else given
            options["previous"] = (
                result_from_vtk(m) if isinstance(m, pyvista.DataSet) else m for m in meshes
            )
        found = strain(before, **options)
        if found.blocks is not before.blocks:
            return pyvista.wrap(vtk_from_result(found))
        mesh = self._mesh.copy(deep=False)
        update_attributes(mesh.GetPointData(), found.point_data, "point", found.component_names)
        update_attributes(mesh.GetCellData(), found.cell_data, "cell", found.component_names)
        return mesh

    def picture(self, **asked: Any) -> Image:
        """Return a picture of the mesh, drawn without a screen; notebooks show it.

        Parameters
        ----------
        **asked
            The options of ``unturn picture`` with underscores, and the keywords of `unturn.strain`: ``measure``,
            ``camera``, ``factor``, ``cut``, ``range``, ``at``, ``displacement`` ...

        Returns
        -------
        unturn.pictures.image.Image
            `save` writes it, `png` holds its bytes, `drawn` what was drawn.

        Raises
        ------
        DisplacementError, UsageError, InputError, MissingExtraError
            As `unturn.pictures.image.picture` says.

        Examples
        --------
        >>> import pyvista
        >>> import unturn._accessor  # not needed once the package is installed
        >>> mesh = pyvista.ImageData(dimensions=(3, 3, 3)).cast_to_unstructured_grid()
        >>> mesh.point_data["u"] = mesh.points * [1e-3, -0.3e-3, -0.3e-3]
        >>> mesh.unturn.picture(camera="front", size="480x480").png[1:4]
        b'PNG'
        """
        from unturn.pictures.image import picture

        return picture(result_from_vtk(self._mesh), **asked)


for _kind in (
    pyvista.UnstructuredGrid,
    pyvista.StructuredGrid,
    pyvista.RectilinearGrid,
    pyvista.ImageData,
    pyvista.PolyData,
):
    pyvista.register_dataset_accessor("unturn", _kind)(UnturnAccessor)
