! Lets truefall run a propagator written in Fortran.
!
!     gfortran -O2 -ffp-contract=off -o adaptor_fortran adaptor.f90
!     ./adaptor_fortran ORBIT.toml OUT.csv
!
! Replace `rates` and the loop in the program by your own code; reading and writing can stay.
! What stands here integrates the geodesic equation of a massive particle in the areal chart with
! the classical fourth-order Runge-Kutta method and a fixed step.  The orbit file is one that
! truefall wrote for this program: one key a line, always with position, velocity and times.

module adaptor
  use, intrinsic :: iso_fortran_env, only: real64, error_unit
  implicit none
  integer, parameter :: steps_per_radian = 200
  real(real64) :: gm, c, energy, momentum2
  character(len=:), allocatable :: text

contains

  subroutine fail(sentence)
    character(len=*), intent(in) :: sentence
    write (error_unit, '(a)') sentence
    stop 1
  end subroutine fail

  subroutine read_all(path)
    character(len=*), intent(in) :: path
    integer :: unit, size, status
    open (newunit=unit, file=path, access='stream', form='unformatted', action='read', &
          status='old', iostat=status)
    if (status /= 0) call fail('cannot read the orbit file')
    inquire (unit, size=size)
    allocate (character(len=size + 1) :: text)
    text(1:1) = new_line('a')
    read (unit, iostat=status) text(2:)
    if (status /= 0) call fail('cannot read the orbit file')
    close (unit)
  end subroutine read_all

  ! What stands after "key = ", at the beginning of a line.
  function value(key) result(found)
    character(len=*), intent(in) :: key
    character(len=:), allocatable :: found
    integer :: first, last
    first = index(text, new_line('a') // key // ' = ')
    if (first == 0) call fail('no key ' // key // ' in the orbit file')
    first = first + len(key) + 4
    last = index(text(first:), new_line('a'))
    if (last == 0) last = len(text) - first + 2
    found = text(first:first + last - 2)
  end function value

  ! The numbers of a list "[1.0, 2.0]", or the one number.
  function numbers(key) result(found)
    character(len=*), intent(in) :: key
    real(real64), allocatable :: found(:)
    character(len=:), allocatable :: list
    integer :: k, count, status
    list = value(key)
    count = 1
    do k = 1, len(list)
      if (list(k:k) == ',') count = count + 1
      if (list(k:k) == '[' .or. list(k:k) == ']') list(k:k) = ' '
    end do
    allocate (found(count))
    read (list, *, iostat=status) found
    if (status /= 0) call fail(key // ' is no list of numbers')
  end function numbers

  ! d/dt of s = (x, w), where w = d x / d (proper time).
  pure function rates(s) result(rate)
    real(real64), intent(in) :: s(6)
    real(real64) :: rate(6), r, slow
    r = norm2(s(1:3))
    slow = (1 - 2 * gm / (c * c * r)) / energy  ! d (proper time) / dt
    rate(1:3) = slow * s(4:6)
    rate(4:6) = -gm / r**3 * (1 + 3 * momentum2 / (c * c * r * r)) * slow * s(1:3)
  end function rates

  pure subroutine step(s, h)
    real(real64), intent(inout) :: s(6)
    real(real64), intent(in) :: h
    real(real64) :: k1(6), k2(6), k3(6), k4(6)
    k1 = rates(s)
    k2 = rates(s + h / 2 * k1)
    k3 = rates(s + h / 2 * k2)
    k4 = rates(s + h * k3)
    s = s + h / 6 * (k1 + 2 * k2 + 2 * k3 + k4)
  end subroutine step

end module adaptor

program main
  use adaptor
  implicit none
  character(len=4096) :: orbit_path, out_path
  real(real64), allocatable :: times(:), first(:)
  real(real64) :: s(6), rate(6), v(3), r, f, radial, across2, slow, time, apart, turn
  integer :: row, k, count, unit, status

  if (command_argument_count() /= 2) call fail('usage: adaptor_fortran ORBIT.toml OUT.csv')
  call get_command_argument(1, orbit_path)
  call get_command_argument(2, out_path)
  call read_all(trim(orbit_path))
  if (value('particle') /= '"massive"' .or. value('chart') /= '"areal"' &
      .or. value('clock') /= '"coordinate"') &
    call fail('this adaptor knows massive particles in the areal chart, in its time')
  c = 299792.458_real64
  if (value('system') == '"SI"') c = 299792458.0_real64
  if (value('system') == '"geometric"') c = 1
  first = numbers('gm')
  gm = first(1)
  first = numbers('start.time')
  time = first(1)
  s(1:3) = numbers('start.position')
  v = numbers('start.velocity')
  times = numbers('times')

  ! constants of the motion, and w = d x / d (proper time)
  r = norm2(s(1:3))
  f = 1 - 2 * gm / (c * c * r)
  radial = dot_product(s(1:3), v) / r
  across2 = dot_product(v, v) - radial**2
  slow = sqrt(f - (radial**2 / f + across2) / c**2)
  energy = f / slow
  momentum2 = r**2 * across2 / slow**2
  s(4:6) = v / slow

  open (newunit=unit, file=trim(out_path), action='write', status='replace', iostat=status)
  if (status /= 0) call fail('cannot write the output file')
  write (unit, '(a)') 'time,x,y,z,vx,vy,vz'
  do row = 1, size(times)
    apart = times(row) - time
    r = norm2(s(1:3))
    turn = abs(apart) * max(sqrt(gm / r**3), norm2(v) / r)
    count = ceiling(turn * steps_per_radian)
    do k = 1, count
      call step(s, apart / count)
    end do
    time = times(row)
    rate = rates(s)
    v = rate(1:3)
    ! 17 digits keep every bit
    write (unit, '(es25.16e3, 6('','', es25.16e3))') time, s(1:3), v
  end do
  close (unit)
end program main
