! Prints xi at the times of times.txt from forcing.dat (two sources) and from coefficients.
program glue
  use nipc_forcing
  implicit none
  type(forcing_table) :: noise
  character(20) :: basis
  real(nipc_dp) :: t, xi(2), first, last, intensity, z(6)
  integer :: status
  call noise%read('forcing.dat', 2)
  open (10, file='coefficients.txt', status='old')
  read (10, *) basis, first, last, intensity, z
  close (10)
  open (10, file='times.txt', status='old')
  do
     read (10, *, iostat=status) t
     if (status /= 0) exit
     call noise%at(t, xi)
     print '(3es25.16)', xi, white_noise(trim(basis), z, intensity, first, last, t)
  end do
end program glue
