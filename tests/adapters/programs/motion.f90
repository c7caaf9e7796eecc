! One run of x' = v, v' = -k x without noise, exactly; plain Fortran arguments, all by reference.
subroutine swing(state, n_times, times, parameters, states) bind(c)
  use iso_c_binding
  implicit none
  integer(c_int32_t), intent(in) :: n_times
  real(c_double), intent(in) :: state(2), times(n_times), parameters(1)
  real(c_double), intent(out) :: states(2, n_times)
  real(c_double) :: w, t
  integer :: i
  w = sqrt(parameters(1))
  do i = 1, n_times
     t = times(i) - times(1)
     states(1, i) = state(1)*cos(w*t) + state(2)/w*sin(w*t)
     states(2, i) = -state(1)*w*sin(w*t) + state(2)*cos(w*t)
  end do
end subroutine swing
