! xi_j(t) for programs that can add one call: nipc's noise, from its table or its coefficients.
!
!     use nipc_forcing
!     type(forcing_table) :: noise
!     call noise%read('forcing.dat', n_sources)      ! rows of t xi_1 ... xi_J, '#' comments
!     call noise%at(t, xi)                           ! xi(1:n_sources)
!
! Between the table's even rows a polynomial of degree seven through the eight nearest is taken: the
! noise is smooth, and with 20 rows a wave the error is some 1e-7 of it, with 100 some 3e-13.
!
!     xi = white_noise(basis, coefficients, intensity, first, last, t)
!
! is the path of one white source from its standard coefficients on the arc from first to last:
! xi(t) = intensity / sqrt(last - first) sum_k Z_k f_k((t - first) / (last - first)), with basis one
! of 'legendre', 'karhunen-loeve', 'completed'. Errors stop the program with code 3 and say why.
module nipc_forcing
  implicit none
  private
  integer, parameter, public :: nipc_dp = kind(1.0d0)
  integer, parameter :: dp = nipc_dp, points = 8
  real(dp), parameter :: pi = 3.14159265358979323846_dp
  public :: white_noise

  type, public :: forcing_table
     real(dp) :: start = 0, step = 0
     real(dp), allocatable :: values(:, :)      ! (sources, rows)
   contains
     procedure :: read => read_table
     procedure :: at => value_at
  end type forcing_table

contains

  subroutine read_table(self, file, n_sources)
    class(forcing_table), intent(inout) :: self
    character(*), intent(in) :: file
    integer, intent(in) :: n_sources
    character(4096) :: line
    real(dp), allocatable :: times(:)
    real(dp) :: row(n_sources + 1)
    integer :: unit, status, rows, i, pass, count
    open (newunit=unit, file=file, status='old', action='read', iostat=status)
    if (status /= 0) call refuse(file, 0, 'cannot be opened')
    rows = 0
    do pass = 1, 2
       rewind (unit)
       i = 0
       count = 0
       do
          read (unit, '(a)', iostat=status) line
          if (status /= 0) exit
          i = i + 1
          if (len_trim(line) == 0 .or. index(adjustl(line), '#') == 1) cycle
          count = count + 1
          if (pass == 1) cycle
          read (line, *, iostat=status) row
          if (status /= 0) call refuse(file, i, 'is no row of t and a number for each source')
          times(count) = row(1)
          self%values(:, count) = row(2:)
       end do
       if (pass == 1) then
          rows = count
          if (rows < 2) call refuse(file, 0, 'has fewer than two rows')
          if (allocated(self%values)) deallocate (self%values)
          allocate (self%values(n_sources, rows), times(rows))
       end if
    end do
    close (unit)
    self%start = times(1)
    self%step = (times(rows) - times(1)) / (rows - 1)
    if (self%step <= 0) call refuse(file, 0, 'does not go forward in time')
    do i = 1, rows
       if (abs(times(i) - self%start - (i - 1) * self%step) > 1e-6_dp * self%step) &
            call refuse(file, 0, 'has rows at uneven times')
    end do
  end subroutine read_table

  ! Barycentric interpolation on even nodes: weights (-1)^i binomial(n, i) (Berrut & Trefethen 2004)
  subroutine value_at(self, t, xi)
    class(forcing_table), intent(in) :: self
    real(dp), intent(in) :: t
    real(dp), intent(out) :: xi(:)
    real(dp) :: u, weight, total
    integer :: first, n, i
    n = min(points, size(self%values, 2))
    u = (t - self%start) / self%step
    if (u < -1e-6_dp .or. u > size(self%values, 2) - 1 + 1e-6_dp) &
         call refuse('the forcing table', 0, 'does not reach this time')
    first = max(0, min(floor(u) - n / 2 + 1, size(self%values, 2) - n))
    xi = 0
    total = 0
    weight = 1
    do i = 0, n - 1
       if (i > 0) weight = -weight * (n - i) / i
       if (u == first + i) then
          xi = self%values(:, first + i + 1)
          return
       end if
       total = total + weight / (u - first - i)
       xi = xi + weight / (u - first - i) * self%values(:, first + i + 1)
    end do
    xi = xi / total
  end subroutine value_at

  function white_noise(basis, coefficients, intensity, first, last, t) result(xi)
    character(*), intent(in) :: basis
    real(dp), intent(in) :: coefficients(:), intensity, first, last, t
    real(dp) :: xi, u, x, before, now, next, w, rest, overlap
    integer :: k, n
    n = size(coefficients)
    u = min(max((t - first) / (last - first), 0.0_dp), 1.0_dp)
    xi = 0
    select case (basis)
    case ('legendre')
       x = 2 * u - 1
       before = 0
       now = 1
       do k = 0, n - 1
          xi = xi + coefficients(k + 1) * sqrt(2.0_dp * k + 1) * now
          next = ((2 * k + 1) * x * now - k * before) / (k + 1)
          before = now
          now = next
       end do
    case ('karhunen-loeve', 'completed')
       rest = 1
       now = 1          ! the constant less its part along each cosine
       do k = 1, merge(n - 1, n, basis == 'completed')
          w = (k - 0.5_dp) * pi
          overlap = sqrt(2.0_dp) * sin(w) / w
          xi = xi + coefficients(k) * sqrt(2.0_dp) * cos(w * u)
          now = now - overlap * sqrt(2.0_dp) * cos(w * u)
          rest = rest - overlap**2
       end do
       if (basis == 'completed') xi = xi + coefficients(n) * now / sqrt(rest)
    case default
       call refuse(basis, 0, 'is no noise basis: legendre, karhunen-loeve, completed')
    end select
    xi = xi * intensity / sqrt(last - first)
  end function white_noise

  subroutine refuse(what, line, why)
    character(*), intent(in) :: what, why
    integer, intent(in) :: line
    if (line > 0) then
       write (0, '(a, a, i0, a, a)') what, ', line ', line, ' ', why
    else
       write (0, '(a, a, a)') what, ' ', why
    end if
    stop 3
  end subroutine refuse

end module nipc_forcing
