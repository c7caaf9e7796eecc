! x' = v, v' = -k x + xi(t) by classical Runge-Kutta on the forcing table; namelist and cards in.
! An invented program for the tests of adapters. The forcing table has an odd number of rows: a
! step spans two of its intervals.
program oscillator
  implicit none
  integer, parameter :: dp = kind(1.0d0)
  integer :: n_times, n_forcing, n_runs, i, r, done, status
  real(dp) :: k, x(2), t, h
  real(dp), allocatable :: table(:, :), times(:)
  character(16) :: style
  namelist /run/ n_times, n_forcing, n_runs, style
  open (10, file='run.nml', status='old')
  read (10, nml=run)
  allocate (times(n_times), table(2, n_forcing))
  do i = 1, n_times
     read (10, *) times(i)
  end do
  close (10)
  open (11, file='forcing.dat', status='old')
  open (12, file='cards.txt', status='old')
  open (13, file='track.out')
  if (style == 'crash') then
     write (0, '(a)') 'the magnet is not powered'
     stop 3
  end if
  if (style == 'hang') call sleep(60)
  do r = 1, n_runs
     do i = 1, n_forcing
        read (11, *) table(:, i)
     end do
     ! a card: columns 1-24 x, 25-48 v, 49-60 k
     read (12, '(2d24.0, d12.0)', iostat=status) x, k
     if (status /= 0) stop 4
     h = table(1, 3) - table(1, 1)
     done = 1
     if (style == 'final') then
        do i = 1, n_forcing - 2, 2
           call step(i)
        end do
        write (13, '(a, d24.16, a, d24.16)') ' X =', x(1), '  V =', x(2)
        cycle
     end if
     do i = 1, n_forcing
        t = table(1, i)
        if (done <= n_times) then
           if (abs(t - times(done)) < 1e-9_dp) then
              call show
              done = done + 1
           end if
        end if
        if (style == 'half' .and. done > n_times / 2) exit
        if (style == 'lost' .and. x(1) > 1.0_dp) then
           if (n_runs == 1) call exit(7)
           exit
        end if
        if (mod(i, 2) == 1 .and. i < n_forcing) call step(i)
     end do
  end do
contains
  subroutine show
    select case (style)
    case ('touch')
       write (13, '(i2, f9.6, 2f10.7)') r, t, x
    case ('comma')
       write (13, '(i4, 3(",", es24.16e3))') r, t, x
    case default
       write (13, '(i4, 3d26.17)') r, t, x
    end select
  end subroutine show
  subroutine step(i)
    integer, intent(in) :: i
    real(dp) :: a(2), b(2), c(2), d(2)
    a = rates(x, table(2, i))
    b = rates(x + h/2*a, table(2, i + 1))
    c = rates(x + h/2*b, table(2, i + 1))
    d = rates(x + h*c, table(2, i + 2))
    x = x + h/6*(a + 2*b + 2*c + d)
  end subroutine step
  function rates(y, xi) result(f)
    real(dp), intent(in) :: y(2), xi
    real(dp) :: f(2)
    f = [y(2), -k*y(1) + xi]
  end function rates
end program oscillator
