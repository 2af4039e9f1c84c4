! Print the first total yields of a hand-off file's first source: h5fc read_handoff.f90 -o read_handoff
program read_handoff
  use hdf5
  implicit none
  character(len=1024) :: path
  integer(hid_t) :: file, total, space
  integer(hsize_t) :: n(4), most(4)
  integer :: status, z
  double precision, allocatable :: y(:, :, :, :)

  call get_command_argument(1, path)
  call h5open_f(status)
  call h5fopen_f(trim(path), H5F_ACC_RDONLY_F, file, status)
  if (status < 0) stop 2
  call h5dopen_f(file, "total", total, status)
  call h5dget_space_f(total, space, status)
  ! in Fortran the dimensions are reversed: species, source, time, metallicity
  call h5sget_simple_extent_dims_f(space, n, most, status)
  allocate(y(n(1), n(2), n(3), n(4)))
  call h5dread_f(total, H5T_NATIVE_DOUBLE, y, n, status)
  if (status < 0) stop 2
  do z = 1, int(n(4))
    print "(es25.17e3)", y(1, 1, n(3), z)
  end do
  call h5sclose_f(space, status)
  call h5dclose_f(total, status)
  call h5fclose_f(file, status)
end program
