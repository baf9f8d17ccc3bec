!> A small solver that ends itself: gusts shake a roof membrane, and the run may stop when the two leading modes of its
!! deflection have settled.
!!
!!     make && ./roof_membrane
!!
!! Damped wave equation on a rectangle with fixed edges, leap-frog in time. Two gust patterns press on it, one even and
!! one that leans along the roof, each wandering about zero with a memory of its own (first-order autoregression), so
!! the record is stationary and its modes can settle.
program roof_membrane
    use, intrinsic :: iso_fortran_env, only: error_unit, real64
    use slackwater, only: slackwater_run, slackwater_settings, slackwater_state
    implicit none
    integer, parameter :: nx = 30, ny = 18, every = 40, longest = 400000
    real(real64), parameter :: spacing = 0.2_real64, dt = 0.004_real64 ! m, s
    real(real64), parameter :: wave_speed = 20, damping = 8, load = 50 ! m/s, 1/s, m/s2
    character(len=*), parameter :: declaration = '{"name": "roof membrane", "n_points": 540, ' // &
        '"fields": [{"name": "w", "unit": "m"}], "dtype": "float64", ' // &
        '"grid": {"kind": "uniform", "shape": [18, 30], "spacing": [0.2, 0.2]}, ' // &
        '"time": {"unit": "s"}, "retained_rank": 12, "criterion": {"n_modes": 2, "max_angle_deg": 10}}'
    real(real64) :: now(0:nx + 1, 0:ny + 1) = 0, before(0:nx + 1, 0:ny + 1) = 0, gusts(2) = 0
    character(len=:), allocatable :: error
    type(slackwater_settings) :: settings
    type(slackwater_state) :: last
    type(slackwater_run) :: run
    integer :: step

    ! This toy makes a thousand snapshots in a second. So that the advice does not come late, it sends large batches and
    ! lets itself be held while two wait. A solver that takes seconds for a step leaves the settings out.
    settings%batch_snapshots = 64
    settings%max_waiting_bytes = 3 * 64 * 540 * 8
    settings%hold_seconds = 30
    call run%declare(declaration, error, settings)
    if (len(error) > 0) write (error_unit, '(a)') 'going on without a service: ' // error

    do step = 1, longest
        call wander(gusts(1), 0.4_real64)
        call wander(gusts(2), 0.2_real64)
        call advance()
        if (mod(step, every) == 0) call run%post(step * dt, now(1:nx, 1:ny))
        if (run%may_stop()) exit
    end do

    call run%close(error, last)
    print '(i0, a, i0, 2a)', step, ' steps, ', last%sent_snapshots, ' snapshots sent, verdict: ', last%verdict
    if (len(error) > 0) write (error_unit, '(a)') error

contains

    !> One step of a wandering quantity of mean 0 and variance 1 with a correlation time of `memory` seconds.
    subroutine wander(value, memory)
        real(real64), intent(inout) :: value
        real(real64), intent(in) :: memory
        real(real64) :: kept, even(12)
        call random_number(even) ! the sum of twelve has variance 1 and is near enough to normal
        kept = exp(-dt / memory)
        value = kept * value + sqrt(1 - kept**2) * (sum(even) - 6)
    end subroutine wander

    subroutine advance()
        real(real64) :: after(0:nx + 1, 0:ny + 1), bend, press
        integer :: i, j
        after = 0
        do j = 1, ny
            do i = 1, nx
                bend = (now(i - 1, j) + now(i + 1, j) + now(i, j - 1) + now(i, j + 1) - 4 * now(i, j)) / spacing**2
                press = load * (gusts(1) + gusts(2) * (2 * i - nx - 1) / nx)
                after(i, j) = now(i, j) + (1 - damping * dt) * (now(i, j) - before(i, j)) + &
                    dt**2 * (wave_speed**2 * bend + press)
            end do
        end do
        before = now
        now = after
    end subroutine advance
end program roof_membrane
