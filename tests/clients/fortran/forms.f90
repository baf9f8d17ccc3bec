!> Posts 2 fields on 10 x 6 points in every form that the module takes, and prints what it says; for the tests.
!!
!!     forms DECLARATION VALUES N_SNAPSHOTS [RUN]
!!
!! VALUES is a file of real32 values, snapshot by snapshot. With RUN, that run is attached instead.
program forms
    use, intrinsic :: iso_fortran_env, only: error_unit, real32, real64
    use slackwater
    implicit none
    integer, parameter :: nx = 10, ny = 6
    character(len=:), allocatable :: declaration, error
    character(len=4096) :: argument
    real(real32), allocatable :: values(:, :, :, :)
    real(real32) :: joined(nx * ny * 2), short(7), padded(2 * nx, ny)
    type(slackwater_settings) :: settings
    type(slackwater_state) :: state
    type(slackwater_run) :: run
    integer :: k, n, unit, outcome
    real(real64) :: time

    call get_command_argument(3, argument)
    read (argument, *) n
    allocate (values(nx, ny, 2, n))
    call get_command_argument(2, argument)
    open (newunit=unit, file=trim(argument), access='stream', form='unformatted', status='old')
    read (unit) values
    close (unit)
    call get_command_argument(1, argument)
    settings%batch_snapshots = 8
    settings%start_seconds = 0.3_real64
    if (command_argument_count() > 3) then
        call get_command_argument(4, argument)
        call run%attach(argument, error, settings)
    else
        declaration = contents(trim(argument))
        call run%declare(declaration, error, settings)
    end if
    if (len(error) > 0) write (error_unit, '(a)') 'no run: ' // error

    do k = 1, n
        time = 0.5_real64 * (k - 1) + 1e-3_real64 / 3
        joined = reshape(values(:, :, :, k), [nx * ny * 2])
        padded = -1
        padded(1::2, :) = values(:, :, 2, k)
        select case (mod(k, 7))
        case (0)
            call run%post(time, values(:, :, 1, k), values(:, :, 2, k), outcome=outcome)
        case (1)
            call run%post(time, joined, outcome=outcome)
        case (2)
            call run%post(time, values(:, :, :, k), outcome=outcome)
        case (3)
            call run%post(time, joined(:nx * ny), joined(nx * ny + 1:), outcome=outcome)
        case (4)
            call run%post(time, values(:, :, 1, k), padded(1::2, :), outcome=outcome) ! gathered by the compiler
        case (5)
            call run%post(time, real(values(:, :, 1, k), real64), real(values(:, :, 2, k), real64), outcome=outcome)
        case default
            call run%post(time, real(joined, real64), outcome=outcome)
        end select
        if (outcome /= slackwater_ok .and. outcome /= slackwater_skipped .and. outcome /= slackwater_no_run) stop 3
    end do
    short = 0
    call run%post(time + 1, short, outcome=outcome)
    if (outcome == slackwater_ok) stop 4
    call run%post(time + 1, values(:, :, 1, n), short_of(values(:, :, 2, n)), outcome=outcome)
    if (outcome == slackwater_ok) stop 5
    call run%post(slackwater_no_time(), joined, outcome=outcome)
    if (outcome == slackwater_ok) stop 6
    call run%read_state(state)
    write (error_unit, '(a)') state%last_error
    print '(3a)', '{"run": "', run%run_id(), '",'
    call run%close(error, state)
    print '(a, 3(i0, a), 3a)', '"sent": ', state%sent_snapshots, ', "skipped": ', state%skipped_snapshots, &
        ', "held": ', state%held_snapshots, ', "error": "', error, '"}'
    deallocate (error, values, state%verdict, state%last_error) ! a main program keeps what it has to its end
    if (allocated(declaration)) deallocate (declaration)

contains

    function short_of(field) result(cut)
        real(real32), intent(in) :: field(:, :)
        real(real32) :: cut(nx, ny - 1)
        cut = field(:, :ny - 1)
    end function short_of

    function contents(path) result(text)
        character(len=*), intent(in) :: path
        character(len=:), allocatable :: text
        integer :: n_bytes
        inquire (file=path, size=n_bytes)
        allocate (character(len=n_bytes) :: text)
        open (newunit=unit, file=path, access='stream', form='unformatted', status='old')
        read (unit) text
        close (unit)
    end function contents
end program forms
