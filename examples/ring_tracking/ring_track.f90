! RING_TRACK: tracks one particle through a small storage ring, turn by turn.
! An invented machine and program, written as such programs are: namelist in, tables in and out.
!
! The ring is one linear turn of phase advance 2 pi nu, cut into ten slices, and a thin sextupole
! of strength s at its end. In normalised coordinates (x, p), with t the middle of a slice,
!     ten times a turn:  p <- p + kick(t) / 10,  (x, p) <- rotation by 2 pi (nu + ripple(t)) / 10
!     once a turn:       p <- p + s x**2
! kick and ripple are read from a table of time (in turns) and interpolated linearly. The particle is
! lost when it is beyond the aperture at the end of a turn. Rows are printed every so many whole
! turns, and a run may start at any whole turn.
program ring_track
  implicit none
  integer, parameter :: dp = kind(1.0d0)
  real(dp) :: x, p, tune, sextupole, aperture, start, finish, angle, a, b, c, t
  integer :: n_out, n_forcing, turns, i, k, status, every
  real(dp), allocatable :: table(:, :)
  integer, parameter :: slices = 10
  namelist /ring/ tune, sextupole, aperture
  namelist /particle/ x, p
  namelist /track/ start, finish, n_out, n_forcing

  open (10, file='ring.nml', status='old')
  read (10, nml=ring)
  read (10, nml=particle)
  read (10, nml=track)
  close (10)
  allocate (table(3, n_forcing))
  open (11, file='forcing.dat', status='old')
  do i = 1, n_forcing
     read (11, *, iostat=status) table(:, i)
     if (status /= 0) then
        write (0, *) 'forcing.dat ends at row', i
        stop 3
     end if
  end do
  close (11)

  turns = nint(finish - start)
  every = max(1, turns / max(1, n_out - 1))
  open (12, file='track.out')
  write (12, '(a)') '# turn, x, p'
  write (12, '(f12.4,2es26.17e3)') start, x, p
  do k = 1, turns
     ! ten slices of a tenth of the rotation, each with its own share of the forcing
     do i = 1, slices
        t = start + k - 1 + (i - 0.5_dp) / slices
        call forcing(t, a, b)
        p = p + a / slices
        angle = 2.0_dp * acos(-1.0_dp) * (tune + b) / slices
        c = x * cos(angle) + p * sin(angle)
        p = -x * sin(angle) + p * cos(angle)
        x = c
     end do
     p = p + sextupole * x**2
     if (abs(x) > aperture) then
        close (12)
        stop 7
     end if
     if (mod(k, every) == 0) write (12, '(f12.4,2es26.17e3)') start + k, x, p
  end do
  close (12)

contains

  subroutine forcing(time, kick, ripple)
    real(dp), intent(in) :: time
    real(dp), intent(out) :: kick, ripple
    real(dp) :: u, w
    integer :: j
    u = (time - table(1, 1)) / (table(1, 2) - table(1, 1))
    j = min(max(int(u) + 1, 1), n_forcing - 1)
    w = u - (j - 1)
    kick = (1 - w) * table(2, j) + w * table(2, j + 1)
    ripple = (1 - w) * table(3, j) + w * table(3, j + 1)
  end subroutine forcing

end program ring_track
