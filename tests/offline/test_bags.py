# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Recordings in every shape: those that somebody else wrote, those that rosbags writes, damage.

The counts of the recorded ones are those that their own metadata and their README state.
"""

from __future__ import annotations

import shutil
import sqlite3
import sys
import tracemalloc

import numpy as np
import pytest
import yaml
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from servo_nodes.offline import bags_salvage
from servo_nodes.offline.bags import Bag, BagError
from tests.offline import recordings

WAYS = [('sqlite3', 'none'), ('sqlite3', 'message'), ('sqlite3', 'file'), ('mcap', 'none'),
        ('mcap', 'message'), ('mcap', 'file'), ('mcap', 'storage')]


def strings(count, size=20, topic='/words', start=1000):
    """Return string messages, one a millisecond."""
    text = recordings.kind('std_msgs/msg/String')
    return [(start + 1_000_000 * number, topic, 'std_msgs/msg/String',
             text(data=f'{number} ' + 'x' * size)) for number in range(count)]


def recorded(shared_data, name, tmp_path):
    """Return a copy of a recording that may be written to."""
    folder = tmp_path / name
    shutil.copytree(shared_data / 'bags' / name, folder, copy_function=shutil.copyfile)
    folder.chmod(0o755)
    return folder


@pytest.mark.parametrize(('name', 'count'), [
    ('marker_board_mcap', 33), ('marker_board_sqlite3', 33), ('zstd_message', 1127),
    ('zstd_file', 775)])
def test_a_good_recording_is_read_to_its_last_message(shared_data, name, count):
    bag = Bag(shared_data / 'bags' / name)
    messages = list(bag.messages())
    times = [message.time for message in messages]
    assert (len(messages), bag.damages, bag.notes) == (count, [], [])
    assert times == sorted(times)
    assert (times[0], times[-1]) == (bag.start, bag.end)


def test_both_recordings_of_the_marker_board_hold_the_same(shared_data):
    one, other = (list(Bag(shared_data / 'bags' / f'marker_board_{name}').messages())
                  for name in ('mcap', 'sqlite3'))
    assert one == other


@pytest.mark.parametrize(('name', 'file', 'reason', 'readable'), [
    ('damaged_db3_truncated', 'ur3_move_0.db3', 'malformed', 1),
    ('damaged_db3_zero_length', 'ur3_move_0.db3', 'got an empty file', 0),
    ('damaged_mcap_truncated', 'fiducial_board_611_mcap.mcap', 'ends after 199948 of', 32),
    ('damaged_metadata_missing_file', 'ur3_move_0.db3', 'named in metadata.yaml', 0)])
def test_a_damaged_recording_names_file_and_reason_and_gives_what_is_readable(
        shared_data, name, file, reason, readable):
    path = shared_data / 'bags' / name
    if not readable:
        with pytest.raises(BagError, match=f'{file}: .*{reason}'):
            Bag(path)
        return
    bag = Bag(path)
    messages = list(bag.messages())
    assert len(messages) == bag.count >= readable
    assert len(bag.damages) == 1
    assert file in bag.damages[0] and reason in bag.damages[0]


def test_what_is_left_of_a_cut_off_sqlite_file_is_most_of_it(shared_data):
    bag = Bag(shared_data / 'bags' / 'damaged_db3_truncated')
    assert 500 < bag.count < 1052
    assert {message.kind for message in bag.messages()} == {'sensor_msgs/msg/JointState'}


@pytest.mark.parametrize(('storage', 'compression'), WAYS)
def test_every_storage_and_compression_gives_the_messages_that_were_written(
        tmp_path, storage, compression):
    written = strings(50)
    bag = Bag(recordings.written(tmp_path / 'run.bag', written, storage=storage,
                                 compression=compression))
    messages = list(bag.messages())
    store = recordings.store()
    assert [message.time for message in messages] == [item[0] for item in written]
    assert [store.deserialize_cdr(message.data, message.kind).data
            for message in messages] == [item[3].data for item in written]


@pytest.mark.parametrize(('storage', 'compression'), WAYS)
@settings(max_examples=6, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(share=st.floats(0.0, 0.999))
def test_a_file_cut_anywhere_ends_in_a_sentence_with_its_name(
        tmp_path_factory, storage, compression, share):
    """Either nothing is readable, or a part is and the damage is told; never a traceback."""
    folder = recordings.written(tmp_path_factory.mktemp('cut') / 'run', strings(300, 200),
                                storage=storage, compression=compression)
    file = next(path for path in folder.iterdir() if path.name != 'metadata.yaml')
    data = file.read_bytes()
    file.write_bytes(data[:int(share * len(data))])
    try:
        bag = Bag(folder)
    except BagError as error:
        assert file.name in str(error)
    else:
        times = [message.time for message in bag.messages()]
        assert 0 < len(times) <= 300 and file.name in bag.damages[0]
        assert times == sorted(set(times) & {item[0] for item in strings(300)})


@settings(max_examples=25, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(storage=st.sampled_from(['mcap', 'sqlite3']), at=st.floats(0, 1), byte=st.integers(0, 255),
       length=st.integers(1, 400))
def test_a_file_with_foreign_bytes_in_it_never_ends_in_a_traceback(
        tmp_path_factory, storage, at, byte, length):
    folder = recordings.written(tmp_path_factory.mktemp('foreign') / 'run', strings(100, 100),
                                storage=storage)
    file = next(path for path in folder.iterdir() if path.name != 'metadata.yaml')
    data = bytearray(file.read_bytes())
    start = int(at * (len(data) - 1))
    data[start:start + length] = bytes([byte]) * len(data[start:start + length])
    file.write_bytes(data)
    try:
        bag = Bag(folder)
        read = sum(1 for _ in bag.messages())
        assert read <= bag.count
    except BagError as error:
        assert str(folder) in str(error)


def test_several_files_are_one_recording_in_order_of_time(shared_data, tmp_path):
    folder = recorded(shared_data, 'zstd_message', tmp_path)
    page = yaml.safe_load((folder / 'metadata.yaml').read_text())
    page['rosbag2_bagfile_information']['relative_file_paths'].reverse()
    (folder / 'metadata.yaml').chmod(0o644)
    (folder / 'metadata.yaml').write_text(yaml.safe_dump(page))
    times = [message.time for message in Bag(folder).messages()]
    assert len(times) == 1127 and times == sorted(times)


def test_files_that_overlap_in_time_are_merged(tmp_path):
    folder = recordings.written(tmp_path / 'a', strings(20))
    other = recordings.written(tmp_path / 'b', strings(20, topic='/others', start=500_000))
    (folder / 'metadata.yaml').unlink()
    shutil.copyfile(other / 'b.db3', folder / 'b.db3')
    messages = list(Bag(folder).messages())
    assert [message.topic for message in messages] == ['/words', '/others'] * 20


@pytest.mark.parametrize(('storage', 'compression'), WAYS)
def test_a_recording_without_metadata_is_read_all_the_same(tmp_path, storage, compression):
    folder = recordings.written(tmp_path / 'run', strings(9), storage=storage,
                                compression=compression)
    (folder / 'metadata.yaml').unlink()
    bag = Bag(folder)
    assert len(list(bag.messages())) == 9
    assert 'metadata.yaml: not there' in bag.notes[0] and not bag.damages


@pytest.mark.parametrize('text', [
    '', '[1, 2', '- a', 'rosbag2_bagfile_information: 7', '\x00', '&a [*a]',
    'rosbag2_bagfile_information: {relative_file_paths: 3, message_count: 9}'])
def test_metadata_that_are_none_leave_a_note(tmp_path, text):
    folder = recordings.written(tmp_path / 'run', strings(9))
    (folder / 'metadata.yaml').write_text(text)
    bag = Bag(folder)
    assert len(list(bag.messages())) == 9
    assert 'expected the metadata of a recording' in bag.notes[0]


def test_metadata_that_contradict_the_files_lose(tmp_path):
    folder = recordings.written(tmp_path / 'run', strings(9), storage='mcap')
    page = yaml.safe_load((folder / 'metadata.yaml').read_text())
    inner = page['rosbag2_bagfile_information']
    inner.update(message_count=500, storage_identifier='sqlite3', compression_mode='FILE',
                 compression_format='zstd')
    inner['topics_with_message_count'][0]['topic_metadata']['offered_qos_profiles'] = (
        '- history: 1\n  depth: 7\n')
    (folder / 'metadata.yaml').write_text(yaml.safe_dump(page))
    bag = Bag(folder)
    assert len(list(bag.messages())) == 9 and not bag.damages
    assert bag.notes == [
        f'{folder / "metadata.yaml"}: it announces 500 messages, the files hold 9']


def test_metadata_that_name_another_file_than_the_one_there_lose(tmp_path):
    folder = recordings.written(tmp_path / 'run', strings(9))
    (folder / 'run.db3').rename(folder / 'renamed_by_hand.db3')
    bag = Bag(folder)
    assert len(list(bag.messages())) == 9 and 'renamed_by_hand.db3 is read' in bag.notes[0]


def test_a_recording_that_announces_messages_and_holds_none_says_so(tmp_path):
    folder = recordings.written(tmp_path / 'run', strings(9))
    connection = sqlite3.connect(folder / 'run.db3')
    connection.execute('DELETE FROM messages')
    connection.commit()
    connection.close()
    with pytest.raises(BagError, match='got none, though metadata.yaml announces some'):
        Bag(folder)


def test_a_file_named_like_the_other_kind_is_known_by_its_first_bytes(tmp_path):
    folder = recordings.written(tmp_path / 'run', strings(9), storage='mcap')
    (folder / 'run.mcap').rename(tmp_path / 'really_mcap.db3')
    assert len(list(Bag(tmp_path / 'really_mcap.db3').messages())) == 9


def test_a_write_ahead_log_left_beside_a_read_only_file_is_read_too(tmp_path):
    folder = recordings.written(tmp_path / 'run', strings(9))
    path = folder / 'run.db3'
    connection = sqlite3.connect(path)
    connection.execute('PRAGMA journal_mode=WAL')
    connection.execute('PRAGMA wal_autocheckpoint=0')
    rows = connection.execute('SELECT topic_id, timestamp, data FROM messages').fetchall()
    connection.executemany('INSERT INTO messages(topic_id, timestamp, data) VALUES (?, ?, ?)',
                           [(topic, time + 10**9, data) for topic, time, data in rows])
    connection.commit()
    copy = tmp_path / 'read_only'
    shutil.copytree(folder, copy)
    connection.close()
    for file in copy.iterdir():
        file.chmod(0o444)
    copy.chmod(0o555)
    before = sorted(file.name for file in copy.iterdir())
    bag = Bag(copy)
    assert len(list(bag.messages())) == 18
    assert any('write-ahead log' in note for note in bag.notes)
    assert sorted(file.name for file in copy.iterdir()) == before
    copy.chmod(0o755)


def test_types_without_msg_and_topics_without_a_slash_are_understood(tmp_path):
    folder = recordings.written(tmp_path / 'run', strings(9, topic='words'))
    connection = sqlite3.connect(folder / 'run.db3')
    connection.execute("UPDATE topics SET type = 'std_msgs/String'")
    connection.commit()
    connection.close()
    messages = list(Bag(folder).messages(['words']))
    assert {(message.topic, message.kind) for message in messages} == {
        ('words', 'std_msgs/msg/String')}


def test_only_the_topics_asked_for_are_given(tmp_path):
    both = sorted(strings(9) + strings(9, topic='/other'), key=lambda item: item[0])
    for storage in ('sqlite3', 'mcap'):
        bag = Bag(recordings.written(tmp_path / storage, both, storage=storage))
        assert {message.topic for message in bag.messages(['/other'])} == {'/other'}


@pytest.mark.parametrize(('content', 'words'), [
    (b'#ROSBAG V2.0\nxyz', 'got one of ROS 1'), (b'hello', 'got something else'),
    (b'', 'got an empty file'), (b'\x28\xb5\x2f\xfd', 'does not unpack to its end'),
    (b'\x89MCAP0\r\n', 'magic|record'), (b'SQLite format 3\0', 'run.bag: ')])
def test_a_file_that_is_no_recording_gets_one_sentence(tmp_path, content, words):
    path = tmp_path / 'run.bag'
    path.write_bytes(content)
    with pytest.raises(BagError, match=words) as caught:
        Bag(path)
    assert '\n' not in str(caught.value) and 'run.bag' in str(caught.value)


def test_no_file_and_an_empty_folder_get_one_sentence(tmp_path):
    with pytest.raises(BagError, match='no such file or folder'):
        Bag(tmp_path / 'nowhere')
    with pytest.raises(BagError, match='expected storage files'):
        Bag(tmp_path)


@pytest.mark.parametrize('storage', ['sqlite3', 'mcap'])
def test_a_long_recording_streams(tmp_path, storage):
    """Forty megabytes of messages pass through less than a fifth of that."""
    text = recordings.kind('std_msgs/msg/String')(data='y' * 400_000)
    folder = recordings.written(tmp_path / 'run', [
        (1000 + n, '/words', 'std_msgs/msg/String', text) for n in range(100)], storage=storage)
    bag = Bag(folder)
    tracemalloc.start()
    assert sum(len(message.data) for message in bag.messages()) > 40_000_000
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    assert peak < 8_000_000


def test_a_message_that_unpacks_to_a_hostile_size_is_bounded():
    packed = bags_salvage.zstd_module().compress(np.zeros(50_000_000, np.uint8).tobytes())
    assert len(bags_salvage.zstd_prefix(packed, 1000)) == 1000


def test_without_the_package_that_reads_recordings_the_remedy_is_told(tmp_path, monkeypatch):
    monkeypatch.setitem(sys.modules, 'rosbags.rosbag2.storage_mcap', None)
    with pytest.raises(BagError, match=r'expected the package rosbags .*pip install'):
        Bag(tmp_path)
