! Heat conduction as an old code has it: a block of zones with ghost zones around, updated in place.
!
! The conductivity grows with the root of the temperature. Indices are reversed against Python's: the first one, which
! is fastest in memory here, runs along y. The old values are kept, because neighbours are overwritten on the way.

function heat_step(u, nx, ny, g, share) result(status) bind(c, name="heat_step")
  use iso_c_binding, only: c_int, c_double
  implicit none
  integer(c_int), value :: nx, ny, g
  real(c_double), value :: share
  real(c_double), intent(inout) :: u(1-g:ny+g, 1-g:nx+g)
  integer(c_int) :: status
  real(c_double), allocatable :: old(:, :)
  real(c_double) :: x, y
  integer :: i, j

  allocate (old(1-g:ny+g, 1-g:nx+g), source=u, stat=status)
  if (status /= 0) return
  do i = 1, nx
    do j = 1, ny
      x = flux(old(j, i), old(j, i+1)) - flux(old(j, i-1), old(j, i))
      y = flux(old(j, i), old(j+1, i)) - flux(old(j-1, i), old(j, i))
      u(j, i) = old(j, i) + share * (x + y)
    end do
  end do
contains
  pure real(c_double) function flux(a, b)
    real(c_double), intent(in) :: a, b
    flux = sqrt(0.5_c_double * (a + b)) * (b - a)
  end function flux
end function heat_step
